"""Nodal rectilinear grids: extent, quadrature weights, refinement and transfer between rungs.

A field on a grid is the function that is linear along each axis between its nodal values
(bilinear in two dimensions), so a finer rung holds a coarser rung's function exactly where it holds
its nodes: with all rules of quadrature but Gauss'.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace
from functools import reduce

import numpy as np
from numpy.typing import NDArray
from scipy.fft import next_fast_len
from scipy.interpolate import RegularGridInterpolator
from scipy.ndimage import gaussian_filter

from stillground.counted import counted
from stillground.errors import GridError
from stillground.quadrature import TRAPEZOID, Quadrature

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Grid:
    """Nodes on even intervals along 1, 2 or 3 axes, elevation last and ascending.

    Parameters
    ----------
    origin : tuple of float, length n_dimensions
        Coordinates where the axes begin: of the first node, but with rules whose nodes lie inside the
        intervals; m.
    spacing : tuple of float
        Length of an interval along each axis, m, positive.
    shape : tuple of int
        Nodes along each axis, at least 2.
    rule : Quadrature
        Where nodes stand in the intervals, and their weights.
    weighted : bool
        Whether the prior knows the weights. Without them it takes nodal values for a mere vector, and the
        answer comes to depend on the rule: only to show what that does.

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
    rule: Quadrature = TRAPEZOID
    weighted: bool = True

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
        for n in self.shape:
            self.rule.n_intervals(n)

    @property
    def n_nodes(self) -> int:
        return math.prod(self.shape)

    @property
    def axes(self) -> tuple[Array, ...]:
        """Node coordinates along each axis, m."""
        return tuple(
            np.asarray(o + h * self.rule.nodes(n), dtype=np.float64)
            for o, h, n in zip(self.origin, self.spacing, self.shape, strict=True)
        )

    @property
    def lengths(self) -> tuple[float, ...]:
        """Extent along each axis, m."""
        return tuple(h * n for h, n in zip(self.spacing, self.intervals, strict=True))

    @property
    def intervals(self) -> tuple[int, ...]:
        """Intervals along each axis."""
        return tuple(self.rule.n_intervals(n) for n in self.shape)

    def weights(self) -> Array:
        """Quadrature weights of the nodes, flattened, shape (n_nodes,), m^n_dimensions.

        The trapezoid's are also the integrals of the nodal basis functions.
        """
        along = [h * self.rule.weights(n) for h, n in zip(self.spacing, self.shape, strict=True)]
        return np.asarray(reduce(np.multiply.outer, along)).reshape(-1)

    def refined(self) -> Grid:
        """The grid of half the spacing on the same extent; with even nodes it holds all nodes of this one."""
        shape = tuple(self.rule.n_nodes(2 * n) for n in self.intervals)
        return replace(self, spacing=tuple(h / 2 for h in self.spacing), shape=shape)

    def norm(self, values: Array) -> float:
        """L2 norm of a nodal field by the grid's quadrature."""
        return float(np.sqrt(self.weights() @ np.square(values).reshape(-1)))

    def mean(self, values: Array) -> float:
        """Mean over the extent of a nodal field: the constant nearest to it in L2."""
        return float(self.weights() @ values.reshape(-1)) / math.prod(self.lengths)

    def local_mean(self, values: Array, lengths: Sequence[float]) -> Array:
        """Gaussian mean of a nodal field over half of ``lengths`` (m, one for each axis).

        The mirror at the edges is that of the trapezoid: its integral over the extent is kept.
        """
        if not self.rule.even:
            values = values.reshape(self.shape)
            for axis, length in enumerate(lengths):
                values = np.moveaxis(
                    np.tensordot(self._means(axis, 0.5 * length), values, (1, axis)), 0, axis
                )
            return values
        sigma = [0.5 * length / h for length, h in zip(lengths, self.spacing, strict=True)]
        return np.asarray(gaussian_filter(values.reshape(self.shape), sigma, mode="mirror"))

    def _means(self, axis: int, sigma: float) -> Array:
        """Matrix of Gaussian means over uneven nodes, mirrored at the ends; rows have sum 1."""
        x, low, high = self.axes[axis], self.origin[axis], self.origin[axis] + self.lengths[axis]
        images = (x, 2 * low - x, 2 * high - x)
        bells = sum(np.exp(-0.5 * ((x[:, None] - image) / sigma) ** 2) for image in images)
        bells = bells * self.rule.weights(x.size)
        return np.asarray(bells / bells.sum(axis=1, keepdims=True))

    def interpolate(self, values: Array, points: Array) -> Array:
        """Values of a nodal field at ``points``, shape (n_points, n_dimensions), within the nodes."""
        lookup = RegularGridInterpolator(self.axes, values.reshape(self.shape))
        return np.asarray(lookup(points))


def carry(values: Array, here: Grid, there: Grid) -> Array:
    """A field's values at the nodes of another grid of the same extent.

    Exact at nodes that both have, else linear between two nodes and on beyond the outermost ones.

    Parameters
    ----------
    values : array, shape ``here.shape`` or with more axes behind them
    here, there : Grid

    Returns
    -------
    array, shape ``there.shape`` and the axes behind
    """
    for axis, (nodes, places) in enumerate(zip(here.axes, there.axes, strict=True)):
        before = np.clip(np.searchsorted(nodes, places, side="right") - 1, 0, nodes.size - 2)
        share = (places - nodes[before]) / (nodes[before + 1] - nodes[before])
        along = np.moveaxis(values, axis, -1)
        values = np.moveaxis(along[..., before] * (1 - share) + along[..., before + 1] * share, -1, axis)
    return values


def prolong(values: Array, coarse: Grid, fine: Grid) -> Array:
    """The same function on a finer rung: exact where nodes are nested, since functions are linear between.

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
    rung, given = coarse, values
    while rung.n_nodes < fine.n_nodes:
        for axis in range(values.ndim if coarse.rule.even else 0):
            before = np.moveaxis(values, axis, 0)
            after = np.empty((2 * before.shape[0] - 1, *before.shape[1:]))
            after[::2] = before
            after[1::2] = 0.5 * (before[:-1] + before[1:])
            values = np.moveaxis(after, 0, axis)
        rung = rung.refined()
    if rung != fine:
        raise GridError(f"{coarse} and {fine} are not rungs of one ladder")
    return values if coarse.rule.even else carry(given, coarse, fine)


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
                f"(finest spacing {h:g} m, {counted(levels, 'rung', 'rungs')}): take a smaller "
                f"ground.spacing or fewer refinement.levels"
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


def ladder_up_to(finest: Grid, levels: int) -> tuple[Grid, ...]:
    """Rungs from coarse to fine that end with a given grid.

    Raises
    ------
    GridError
        When its intervals cannot be joined to pairs so often; it says how often they can.

    Examples
    --------
    >>> [g.shape for g in ladder_up_to(Grid((0.0,), (1.0,), (13,)), 3)]
    [(4,), (7,), (13,)]
    """
    rungs = [finest]
    while len(rungs) < levels:
        try:
            shape = tuple(finest.rule.n_nodes(_half(n)) for n in rungs[0].intervals)
        except GridError as error:
            counts = " by ".join(str(n) for n in finest.intervals)
            raise GridError(
                f"{counts} intervals with {finest.rule.name} weights make "
                f"{counted(len(rungs), 'rung', 'rungs')} and not {levels}"
            ) from error
        rungs.insert(0, replace(rungs[0], spacing=tuple(2 * h for h in rungs[0].spacing), shape=shape))
    return tuple(rungs)


def _half(intervals: int) -> int:
    if intervals % 2 or intervals < 4:
        raise GridError(f"{intervals} intervals cannot be joined to pairs")
    return intervals // 2
