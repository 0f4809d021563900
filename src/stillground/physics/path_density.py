"""How much way of rays lies where: the coverage of kinds that measure along rays."""

from __future__ import annotations

import numpy as np

from stillground.grid import Grid
from stillground.operators.straight_rays import StraightRays
from stillground.protocols import Array, Field


def path_density(
    grid: Grid, starts: Array, ends: Array, correlation: tuple[float, ...], lengths: Array | None = None
) -> Field:
    """Length of straight ways in a unit of area, a Gaussian mean over half a correlation length, m-1.

    Rays have no width: without the mean the density would depend on the grid. The mean keeps the total
    length.

    Parameters
    ----------
    grid : Grid
        Of a section.
    starts, ends : array, shape (n_ways, 2)
        In the section, m.
    correlation : tuple of float
        Correlation lengths along the axes, m.
    lengths : array, shape (n_ways,), optional
        True lengths in space, m; default: those on the section.
    """
    ways = StraightRays(grid, starts, ends, lengths)
    density = ways.rmatvec(np.ones(len(starts))) / grid.weights()
    return Field("path_density", grid.local_mean(density, correlation), "m-1", "ray length per area")
