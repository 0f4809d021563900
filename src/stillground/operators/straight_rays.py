"""Line integrals of a nodal field along straight rays as a `pylops.LinearOperator`."""

from __future__ import annotations

from functools import partial

import numpy as np
from numpy.typing import NDArray
from pylops import LinearOperator

from stillground.errors import GridError
from stillground.grid import Grid
from stillground.kernels import bilinear_rays
from stillground.kernels.blocks import cut, run_blocks

Array = NDArray[np.float64]
Integers = NDArray[np.int64]


# Kernels are compiled for each number of columns, in seconds, and gain nothing beyond a few of them.
_TOGETHER = 4


# Numbers of blocks follow from the work and not from the threads: sums then come in the same order on
# every machine. Below some 100,000 crossings or nodes the threads' start costs more than it brings.
def _blocks(work: int) -> int:
    return 1 if work < 100_000 else 4


class _Family:
    """Rays that cover the same axis faster: the last one, or the first on the transposed field."""

    def __init__(self, index: Integers, here: Array, there: Array, lengths: Array, transposed: bool) -> None:
        order = slice(None, None, -1) if transposed else slice(None)
        self.index = index
        self.transposed = transposed
        self.rays, crossed = bilinear_rays.ray_table(
            here[index][:, order], there[index][:, order], lengths[index]
        )
        # An end costs about as much as two crossings.
        n_blocks = _blocks(int(crossed.sum()))
        self.ranges = cut(crossed + 4, n_blocks)
        first = np.floor(self.rays[:, 1]).astype(np.int64) + 1
        n_rows = int(first.max()) + int(crossed.max()) + 1
        entered, left = (np.bincount(row, minlength=n_rows) for row in (first, first + crossed))
        self.bands = cut(np.cumsum(entered - left), n_blocks)


class StraightRays(LinearOperator):
    """Exact integrals of bilinear nodal fields along straight rays in two dimensions.

    Parameters
    ----------
    grid : Grid
        Two-dimensional.
    starts, ends : array, shape (n_rays, 2)
        End points in the grid's coordinates, inside it or on its edge, m.
    lengths : array, shape (n_rays,), optional
        Lengths that the integrals are to be taken over, m; default, the distances between the
        ends. Where the true ray leaves the section's plane its true length goes here: the ground
        is then taken as constant across the plane.
    threads : int, optional
        Default: numba's number (NUMBA_NUM_THREADS). Results do not depend on it to the bit.

    Raises
    ------
    GridError
        When the grid is not two-dimensional or a point is outside it.

    Notes
    -----
    Forward, for a field m on the nodes with bilinear basis functions phi_j, and adjoint:

    .. math::
        d_i = \\int_{ray\\,i} \\sum_j m_j \\phi_j \\, ds, \\qquad
        m_j = \\sum_i d_i \\int_{ray\\,i} \\phi_j \\, ds

    Examples
    --------
    >>> grid = Grid(origin=(0.0, 0.0), spacing=(0.5, 0.5), shape=(5, 5))
    >>> A = StraightRays(grid, np.array([[0.0, 0.0]]), np.array([[2.0, 1.5]]))
    >>> A @ np.ones(grid.n_nodes)
    array([2.5])
    """

    def __init__(
        self,
        grid: Grid,
        starts: Array,
        ends: Array,
        lengths: Array | None = None,
        threads: int | None = None,
    ) -> None:
        if len(grid.shape) != 2:
            raise GridError(f"straight rays need a grid of 2 axes; got {len(grid.shape)}")
        origin, spacing = np.array(grid.origin), np.array(grid.spacing)
        top = np.array(grid.shape) - 1.0
        here, there = ((np.asarray(p, dtype=float) - origin) / spacing for p in (starts, ends))
        inside = np.all((np.minimum(here, there) >= -1e-9) & (np.maximum(here, there) <= top + 1e-9), axis=1)
        if not inside.all():
            ray = int(np.flatnonzero(~inside)[0])
            raise GridError(f"ray {ray} from {starts[ray]} to {ends[ray]} leaves the grid")
        here, there = np.clip(here, 0, top), np.clip(there, 0, top)
        if lengths is None:
            lengths = np.linalg.norm(np.asarray(ends) - np.asarray(starts), axis=1)
        along_last = np.abs(there - here)[:, 1] >= np.abs(there - here)[:, 0]
        self._grid, self._rays = grid, (np.asarray(starts), np.asarray(ends), np.asarray(lengths))
        self._grid_shape = grid.shape
        self._threads = threads
        self._families = [
            _Family(np.flatnonzero(chosen), here, there, lengths, transposed)
            for chosen, transposed in ((along_last, False), (~along_last, True))
            if chosen.any()
        ]
        super().__init__(dtype=np.dtype(np.float64), dims=(grid.n_nodes,), dimsd=(len(here),))

    def rows(self, index: Integers) -> StraightRays:
        """The operator of some rays only."""
        starts, ends, lengths = (each[index] for each in self._rays)
        return StraightRays(self._grid, starts, ends, lengths, self._threads)

    def _matmat(self, X: Array) -> Array:
        X = np.asarray(X, dtype=np.float64)
        out = np.empty((self.shape[0], X.shape[1]))
        for first in range(0, X.shape[1], _TOGETHER):
            columns = slice(first, first + _TOGETHER)
            for family in self._families:
                out[family.index, columns] = self._follow(family, X[:, columns])
        return out

    def _rmatmat(self, X: Array) -> Array:
        X = np.asarray(X, dtype=np.float64)
        total = np.zeros((self.shape[1], X.shape[1]))
        for first in range(0, X.shape[1], _TOGETHER):
            columns = slice(first, first + _TOGETHER)
            for family in self._families:
                nodes = total.reshape(*self._grid_shape, -1)[..., columns]
                nodes += self._spread(family, X[family.index, columns])
        return total

    def _follow(self, family: _Family, fields: Array) -> Array:
        """Integrals of fields, shape (n_nodes, k), along the rays of a family, shape (n_rays, k)."""
        k = fields.shape[1]
        field = fields.reshape(*self._grid_shape, k)
        m = np.ascontiguousarray(field.swapaxes(0, 1) if family.transposed else field)
        c, e, dm = np.empty_like(m), np.empty_like(m), np.empty((*m.shape[:2], 2, k))
        rows = cut(np.ones(len(m)), _blocks(m.size))
        integrate, difference = bilinear_rays.antiderivatives(k), bilinear_rays.second_differences(k)
        run_blocks([partial(integrate, m, c, e, *r) for r in rows], self._threads)
        run_blocks([partial(difference, m, e, dm, *r) for r in rows], self._threads)
        out = np.empty((family.index.size, k))
        follow = bilinear_rays.forward(k)
        run_blocks([partial(follow, family.rays, *r, m, c, e, dm, out) for r in family.ranges], self._threads)
        return out

    def _spread(self, family: _Family, data: Array) -> Array:
        """Adjoint of ``_follow``: data, shape (n_rays, k), to nodes, shape (*grid.shape, k)."""
        k = data.shape[1]
        y = np.ascontiguousarray(data)
        shape = self._grid_shape[::-1] if family.transposed else self._grid_shape
        m, c, e = np.zeros((3, *shape, k))
        dm = np.zeros((*shape, 2, k))
        scatter = bilinear_rays.adjoint_crossings(k)
        blocks = [partial(scatter, family.rays, y, dm, *band) for band in family.bands]
        ends = partial(bilinear_rays.adjoint_ends(k), family.rays, y, m, c, e)
        run_blocks([*blocks, ends], self._threads if len(blocks) > 1 else 1)
        collect = bilinear_rays.antiderivatives_adjoint(k)
        rows = cut(np.ones(len(m)), _blocks(m.size))
        run_blocks([partial(collect, m, c, e, dm, *r) for r in rows], self._threads)
        return m.swapaxes(0, 1) if family.transposed else m

    def _matvec(self, x: Array) -> Array:
        return self._matmat(x.reshape(-1, 1)).reshape(-1)

    def _rmatvec(self, x: Array) -> Array:
        return self._rmatmat(x.reshape(-1, 1)).reshape(-1)
