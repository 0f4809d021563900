"""Families of synthetic ground, of unit size: the survey's own signal scales them."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from stillground.grid import Grid
from stillground.operators.prior_root import PriorRoot
from stillground.protocols import Array

# Layers are this many correlation lengths thick, drawn evenly between the two.
_THICKNESS = (0.5, 4.0)


def prior_grounds(
    grid: Grid, correlation: Sequence[float], smoothness: float, n: int, random: np.random.Generator
) -> Array:
    """Grounds drawn from the prior, shape (n_nodes, n)."""
    root = PriorRoot(grid, correlation, smoothness)
    return np.asarray(root.matmat(random.standard_normal((grid.n_nodes, n))))


def layered_grounds(grid: Grid, length: float, n: int, random: np.random.Generator) -> Array:
    """Level layers of random thickness and value, sharp at their edges, shape (n_nodes, n).

    Rules that do well on smooth ground fail first on these.
    """
    elevation = grid.axes[-1]
    thinnest, thickest = (factor * length for factor in _THICKNESS)
    most = int(np.ceil(grid.lengths[-1] / thinnest)) + 1
    grounds = np.empty((elevation.size, n))
    for j in range(n):
        edges = elevation[0] + np.cumsum(random.uniform(thinnest, thickest, most))
        values = random.standard_normal(most + 1)
        grounds[:, j] = values[np.searchsorted(edges, elevation, side="right")]
    across = grid.n_nodes // elevation.size
    return np.tile(grounds, (across, 1))
