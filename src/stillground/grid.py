"""Nodal rectilinear grids: extent, quadrature weights, refinement and transfer between rungs.

A field on a grid is the function that is linear along each axis between its nodal values
(bilinear in two dimensions), so a finer rung holds a coarser rung's function exactly.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from functools import reduce

import numpy as np
from numpy.typing import NDArray
from scipy.fft import next_fast_len
from scipy.interpolate import RegularGridInterpolator
from scipy.ndimage import gaussian_filter

from stillground.errors import GridError

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Grid:
    """Evenly spaced nodes along 1, 2 or 3 axes, elevation last and ascending.

    Parameters
    ----------
    origin : tuple of float, length n_dimensions
        Coordinates of the first node, m.
    spacing : tuple of float
        Distance between nodes along each axis, m, positive.
    shape : tuple of int
        Nodes along each axis, at least 2.

    Examples
    --------
    >>> grid = Grid(origin=(0.0,), spacing=(0.5,), shape=(5,))
    >>> grid.axes[0]
    array([0. , 0.5, 1. , 1.5, 2. ])
    >>> grid.weights()
    array([0.25, 0.5 , 0.5 , 0.5 , 0.25])
    >>> grid.refined().shape
    (9,)
    """

    origin: tuple[float, ...]
    spacing: tuple[float, ...]
    shape: tuple[int, ...]

    def __post_init__(self) -> None:
        if not 1 <= len(self.shape) <= 3 or not len(self.origin) == len(self.spacing) == len(self.shape):
            raise GridError(
                f"a grid has 1, 2 or 3 axes with one origin, spacing and count each; "
                f"got {len(self.origin)}, {len(self.spacing)} and {len(self.shape)}"
            )
        if min(self.shape) < 2:
            raise GridError(f"a grid needs at least 2 nodes along each axis; got {self.shape}")
        if not all(h > 0 and math.isfinite(h) for h in self.spacing):
            raise GridError(f"spacings must be positive; got {self.spacing}")

    @property
    def n_nodes(self) -> int:
        return math.prod(self.shape)

    @property
    def axes(self) -> tuple[Array, ...]:
        """Node coordinates along each axis, m."""
        return tuple(
            np.asarray(o + h * np.arange(n), dtype=np.float64)
            for o, h, n in zip(self.origin, self.spacing, self.shape, strict=True)
        )

    @property
    def lengths(self) -> tuple[float, ...]:
        """Extent along each axis, m."""
        return tuple(h * (n - 1) for h, n in zip(self.spacing, self.shape, strict=True))

    def weights(self) -> Array:
        """Trapezoid quadrature weights of the nodes, flattened, shape (n_nodes,), m^n_dimensions.

        They are also the integrals of the nodal basis functions.
        """
        along = []
        for h, n in zip(self.spacing, self.shape, strict=True):
            w = np.full(n, h)
            w[[0, -1]] *= 0.5
            along.append(w)
        return np.asarray(reduce(np.multiply.outer, along)).reshape(-1)

    def refined(self) -> Grid:
        """The grid of half the spacing on the same extent; it holds all nodes of this one."""
        return Grid(self.origin, tuple(h / 2 for h in self.spacing), tuple(2 * n - 1 for n in self.shape))

    def norm(self, values: Array) -> float:
        """L2 norm of a nodal field by the grid's quadrature."""
        return float(np.sqrt(self.weights() @ np.square(values).reshape(-1)))

    def mean(self, values: Array) -> float:
        """Mean over the extent of a nodal field: the constant nearest to it in L2."""
        return float(self.weights() @ values.reshape(-1)) / math.prod(self.lengths)

    def local_mean(self, values: Array, lengths: Sequence[float]) -> Array:
        """Gaussian mean of a nodal field over half of ``lengths`` (m, one for each axis).

        The mirror at the edges is that of the quadrature: the integral over the extent is kept.
        """
        sigma = [0.5 * length / h for length, h in zip(lengths, self.spacing, strict=True)]
        return np.asarray(gaussian_filter(values.reshape(self.shape), sigma, mode="mirror"))

    def interpolate(self, values: Array, points: Array) -> Array:
        """Values of a nodal field at ``points``, shape (n_points, n_dimensions), within the extent."""
        lookup = RegularGridInterpolator(self.axes, values.reshape(self.shape))
        return np.asarray(lookup(points))


def prolong(values: Array, coarse: Grid, fine: Grid) -> Array:
    """The same function on a finer rung: exact, since nodes are nested and functions linear between.

    Parameters
    ----------
    values : array, shape ``coarse.shape``
    coarse, fine : Grid
        ``fine`` must come from ``coarse`` by refining zero or more times.

    Returns
    -------
    array, shape ``fine.shape``

    Raises
    ------
    GridError
        When the grids are not rungs of one ladder.
    """
    rung = coarse
    while rung.n_nodes < fine.n_nodes:
        for axis in range(values.ndim):
            before = np.moveaxis(values, axis, 0)
            after = np.empty((2 * before.shape[0] - 1, *before.shape[1:]))
            after[::2] = before
            after[1::2] = 0.5 * (before[:-1] + before[1:])
            values = np.moveaxis(after, 0, axis)
        rung = rung.refined()
    if rung != fine:
        raise GridError(f"{coarse} and {fine} are not rungs of one ladder")
    return values


def ladder(
    lower: Sequence[float], upper: Sequence[float], spacing: Sequence[float], levels: int
) -> tuple[Grid, ...]:
    """Rungs from coarse to fine over one extent; the finest has the spacing asked for.

    The extent is widened, about equally on both sides, to multiples of the coarsest spacing whose
    count has no prime factor above 5: the cosine transform on the nodes is then fast.

    Parameters
    ----------
    lower, upper : sequence of float
        The extent to cover, m.
    spacing : sequence of float
        Of the finest rung, m.
    levels : int
        Number of rungs; rung spacings are ``2**(levels-1), ..., 2, 1`` times ``spacing``.

    Raises
    ------
    GridError
        When the extent has no size or no end, a spacing is not positive, there is no rung, or the
        coarsest rung has fewer than two intervals along an axis.

    Examples
    --------
    >>> [g.shape for g in ladder((0, 0), (18, 26), (0.25, 0.25), 3)]
    [(19, 28), (37, 55), (73, 109)]
    """
    origins, counts = [], []
    for low, high, h in zip(lower, upper, spacing, strict=True):
        if not (h > 0 and all(map(math.isfinite, (low, high, h))) and levels >= 1):
            raise GridError(
                f"a ladder needs a finite extent, a positive spacing and at least 1 rung; "
                f"got {low:g} to {high:g} m, {h:g} m and {levels}"
            )
        coarse = h * 2 ** (levels - 1)
        if (high - low) / coarse < 2 - 1e-9:
            raise GridError(
                f"the ground is {high - low:g} m across, too little for a coarsest rung of {coarse:g} m "
                f"(finest spacing {h:g} m, {levels} rungs): take a smaller ground.spacing "
                f"or fewer refinement.levels"
            )
        first = math.floor(low / coarse + 1e-9)
        needed = math.ceil(high / coarse - 1e-9) - first
        intervals = next_fast_len(needed, real=True)
        origins.append((first - (intervals - needed) // 2) * coarse)
        counts.append(intervals + 1)
    rung = Grid(tuple(origins), tuple(h * 2 ** (levels - 1) for h in spacing), tuple(counts))
    rungs = [rung]
    while len(rungs) < levels:
        rungs.append(rungs[-1].refined())
    return tuple(rungs)
