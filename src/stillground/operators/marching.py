"""The march of `kernels.fast_marching` for sources and receivers anywhere in the ground of a grid."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from stillground.errors import GridError
from stillground.grid import Grid
from stillground.kernels.blocks import cut
from stillground.kernels.fast_marching import CLOSED, FAR, PAD, march

Array = NDArray[np.float64]
Integers = NDArray[np.int64]

# Sources share work arrays in blocks, whose number does not depend on the threads: sums over sources
# then come in the same order on every machine.
_BLOCKS = 8


@dataclass(frozen=True)
class Layout:
    """Data on a grid padded for the kernels; places in index units of the padded grid.

    Parameters
    ----------
    grid : Grid
        Two-dimensional.
    closed : int32 array, shape (n_padded,)
        Which nodes are ground, as the march takes it.
    surface : array, shape (n_padded_rows,)
        Height of the surface at each row of nodes along the first axis.
    sources : array, shape (n_sources, 2)
    source : int array, shape (n_data,)
        Source of each datum.
    receivers : array, shape (n_data, 2)
    nodes, weights : array, shape (n_data, 4)
        The time of a datum is the sum of weights, m, times tau at nodes.
    """

    grid: Grid
    closed: NDArray[np.int32]
    surface: Array
    sources: Array
    source: Integers
    receivers: Array
    nodes: Integers
    weights: Array

    @property
    def spacing(self) -> Array:
        return np.array(self.grid.spacing)

    @property
    def padded_shape(self) -> tuple[int, int]:
        n, m = self.grid.shape
        return n + 2 * PAD, m + 2 * PAD

    def pad(self, fields: Array) -> Array:
        """Fields, shape (n_nodes, k), on the padded grid, shape (n_padded, k)."""
        padded = np.zeros((*self.padded_shape, fields.shape[1]))
        padded[PAD:-PAD, PAD:-PAD] = fields.reshape(*self.grid.shape, -1)
        return padded.reshape(-1, fields.shape[1])

    def crop(self, fields: Array) -> Array:
        """The transpose of ``pad``."""
        inner = fields.reshape(*self.padded_shape, -1)[PAD:-PAD, PAD:-PAD]
        return inner.reshape(self.grid.n_nodes, -1)

    def node(self, padded: Integers) -> Integers:
        """Numbers on the grid of nodes of the padded grid."""
        stride = self.padded_shape[1]
        return (padded // stride - PAD) * self.grid.shape[1] + padded % stride - PAD

    def rows(self, index: Integers) -> Layout:
        """The same with some data only."""
        return replace(
            self,
            source=self.source[index],
            receivers=self.receivers[index],
            nodes=self.nodes[index],
            weights=self.weights[index],
        )

    def data_of(self, source: int) -> Integers:
        return np.flatnonzero(self.source == source)

    def blocks(self) -> list[list[int]]:
        """Sources that have data."""
        used = np.unique(self.source)
        return [used[slice(*ends)].tolist() for ends in cut(np.ones(used.size), _BLOCKS)]


def lay_out(grid: Grid, starts: Array, ends: Array, surface: tuple[Array, Array] | None) -> Layout:
    """Put data into a grid; `operators.curved_rays.TravelTimes` says what is what."""
    if len(grid.shape) != 2:
        raise GridError(f"curved rays need a grid of 2 axes; got {len(grid.shape)}")
    origin, spacing, top = np.array(grid.origin), np.array(grid.spacing), np.array(grid.shape) - 1.0
    here, there = ((np.asarray(p, dtype=float) - origin) / spacing for p in (starts, ends))
    ceiling = [np.full(len(here), top[1]) for _ in range(2)]
    if surface is not None:
        ceiling = [
            (np.interp(np.asarray(p)[:, 0], *surface) - origin[1]) / spacing[1] for p in (starts, ends)
        ]
    for what, place, given, above in (
        ("starts", here, starts, ceiling[0]),
        ("ends", there, ends, ceiling[1]),
    ):
        outside = np.any((place < -1e-9) | (place > top + 1e-9), axis=1)
        airborne = place[:, 1] > above + 1e-6
        for bad, where in ((outside, "outside the grid"), (airborne, "above the surface")):
            if bad.any():
                ray = int(np.flatnonzero(bad)[0])
                raise GridError(f"ray {ray} {what} {where}, at {tuple(map(float, given[ray]))} m")
    here, there = (
        np.column_stack([np.clip(p[:, 0], 0, top[0]), np.clip(p[:, 1], 0, np.minimum(above, top[1]))])
        for p, above in zip((here, there), ceiling, strict=True)
    )
    # Times are the same both ways; one march serves all data of a source.
    sources, source = np.unique(here, axis=0, return_inverse=True)
    others, other = np.unique(there, axis=0, return_inverse=True)
    receivers = there
    if len(others) < len(sources):
        sources, source, receivers = others, other, here
    # A place on a grid line belongs to the cell below, which is ground where that above may be air.
    cell = np.column_stack([np.floor(receivers[:, 0]), np.ceil(receivers[:, 1]) - 1]).astype(np.int64)
    cell = np.clip(cell, 0, np.array(grid.shape) - 2)
    (u, v), stride = (receivers - cell).T, grid.shape[1] + 2 * PAD
    low = (cell[:, 0] + PAD) * stride + cell[:, 1] + PAD
    distance = np.linalg.norm((receivers - sources[source.reshape(-1)]) * spacing, axis=1)
    shares = np.column_stack([(1 - u) * (1 - v), (1 - u) * v, u * (1 - v), u * v])
    return Layout(
        grid=grid,
        closed=_closed(grid, surface),
        surface=_heights(grid, surface),
        sources=sources + PAD,
        source=source.reshape(-1).astype(np.int64),
        receivers=receivers + PAD,
        nodes=low[:, None] + np.array([0, 1, stride, stride + 1]),
        weights=distance[:, None] * shares,
    )


def _closed(grid: Grid, surface: tuple[Array, Array] | None) -> NDArray[np.int32]:
    """Nodes of the padded grid: open are those of all cells that the ground touches."""
    n, m = grid.shape
    state = np.full((n + 2 * PAD, m + 2 * PAD), CLOSED, dtype=np.int32)
    touched = np.full(n - 1, m - 1)
    if surface is not None:
        x, z = (np.asarray(each, dtype=float) for each in surface)
        at_nodes = np.interp(grid.axes[0], x, z)
        highest = np.maximum(at_nodes[:-1], at_nodes[1:])
        column = np.floor((x - grid.origin[0]) / grid.spacing[0]).astype(int)
        inside = (column >= 0) & (column < n - 1)
        np.maximum.at(highest, column[inside], z[inside])
        level = (highest - grid.origin[1]) / grid.spacing[1]
        if level.min() <= 0:
            place = grid.axes[0][int(level.argmin())]
            raise GridError(f"the surface at distance {place:g} m is not above the lowest nodes of the grid")
        touched = np.minimum(np.ceil(level - 1e-9).astype(int), m - 1)
    highest_node = np.maximum(np.append(touched, 0), np.append(0, touched))
    state[PAD:-PAD, PAD:-PAD] = np.where(np.arange(m) <= highest_node[:, None], FAR, CLOSED)
    return state.reshape(-1)


def _heights(grid: Grid, surface: tuple[Array, Array] | None) -> Array:
    """Of the surface in index units of the padded grid, level beyond the grid."""
    top = grid.shape[1] - 1.0
    if surface is None:
        return np.full(grid.shape[0] + 2 * PAD, top + PAD)
    level = (np.interp(grid.axes[0], *surface) - grid.origin[1]) / grid.spacing[1]
    return np.pad(np.minimum(level, top) + PAD, PAD, mode="edge")


@dataclass(frozen=True)
class Marched:
    """What one source's march leaves: tau and stencil of each node, and the order of acceptance."""

    tau: Array
    code: NDArray[np.uint8]
    order: NDArray[np.int32]


class Marcher:
    """Work arrays for marching one source after the other over ``slowness`` of the padded shape.

    After ``march`` the array ``field``, shape (n_padded, 2), holds T and tau.
    """

    def __init__(self, layout: Layout, slowness: Array) -> None:
        n = slowness.size
        self._layout, self._slowness = layout, slowness
        self.field = np.empty((n, 2))
        self._place, self._order, self._heap = np.empty((3, n), np.int32)
        self._code, self._keys = np.empty(n, np.uint8), np.empty(n)
        self._count = 0

    def march(self, source: int) -> None:
        self._count = march(
            self._slowness,
            self._layout.closed,
            self._layout.surface,
            self._layout.sources[source],
            self._layout.spacing,
            self.field,
            self._place,
            self._code,
            self._order,
            self._keys,
            self._heap,
        )

    def times(self, data: Integers) -> Array:
        """Travel times of some data of the source last marched."""
        return np.asarray((self._layout.weights[data] * self.field[self._layout.nodes[data], 1]).sum(axis=1))

    def kept(self) -> Marched:
        """A copy of what the derivative needs."""
        return Marched(self.field[:, 1].copy(), self._code.copy(), self._order[: self._count].copy())
