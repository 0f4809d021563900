"""First-arrival travel times over a nodal field of slowness, and their derivative along traced rays."""

from __future__ import annotations

from collections.abc import Callable
from functools import partial

import numpy as np
from numpy.typing import NDArray
from pylops import LinearOperator
from scipy.sparse import csr_array, diags_array

from stillground.grid import Grid
from stillground.kernels.blocks import run_blocks
from stillground.kernels.fast_marching import PAD
from stillground.kernels.traced_rays import follow, trace
from stillground.operators.arrival_derivative import ArrivalDerivative
from stillground.operators.marching import Marched, Marcher, lay_out

Array = NDArray[np.float64]
Integers = NDArray[np.int64]

# A traced ray whose time is off by more than this part of the first arrival's went astray.
_ASTRAY = 0.01

# Exact rows fade away from the ray; what is left out of one, relative to its largest entry.
_NEGLIGIBLE = 1e-9


class TravelTimes:
    """First arrivals between points of the ground, for any slowness on the nodes of a grid.

    Parameters
    ----------
    grid : Grid
        Two-dimensional.
    starts, ends : array, shape (n_data, 2)
        Source and receiver of each datum (either way round) in the grid's coordinates, m, on or below
        the surface; they need not be nodes. One march serves all data that share an end.
    surface : pair of array, optional
        Distance, ascending, and elevation of the ground surface, m. Rays keep to the cells that the
        ground below it touches. Default: the ground fills the grid.
    threads : int, optional
        Default: numba's number (NUMBA_NUM_THREADS). Results do not depend on it to the bit.

    Raises
    ------
    GridError
        When the grid is not two-dimensional, a point is outside it or above the surface, or the surface
        leaves no ground.

    Notes
    -----
    Times solve the eikonal equation |grad T| = s by fast marching, of second order in the spacing
    where the medium is smooth, also under relief, and of first order behind sharp interfaces and where
    fronts creep around a hollow of the surface, whose edge is known to a cell (see
    `stillground.kernels.fast_marching`). Between nodes T is distance times a bilinear function.

    References
    ----------
    Sethian (1996), PNAS 93, 1591. Treister & Haber (2016), J. Comput. Phys. 324, 210.

    Examples
    --------
    >>> grid = Grid(origin=(0.0, 0.0), spacing=(0.5, 0.5), shape=(9, 5))
    >>> times = TravelTimes(grid, np.array([[0.0, 2.0]]), np.array([[3.0, 2.0]]))
    >>> slowness = np.full(grid.n_nodes, 0.001)
    >>> bool(np.isclose(times.predict(slowness)[0], 0.003))
    True
    >>> derivative = times.linearise(slowness)
    >>> bool(np.isclose((derivative @ slowness)[0], 0.003))
    True
    """

    def __init__(
        self,
        grid: Grid,
        starts: Array,
        ends: Array,
        surface: tuple[Array, Array] | None = None,
        threads: int | None = None,
    ) -> None:
        self._layout = lay_out(grid, starts, ends, surface)
        self._starts = np.asarray(starts, dtype=np.float64)
        self._threads = threads
        self.n_data = self._layout.source.size

    def predict(self, slowness: Array) -> Array:
        """Travel times, shape (n_data,), s, for a nodal field of slowness, s/m.

        Raises
        ------
        ValueError
            When a slowness is not positive and finite.
        """
        times = np.empty(self.n_data)

        def visit(marcher: Marcher, source: int, data: Integers) -> None:
            times[data] = marcher.times(data)

        self._each_source(self._padded(slowness), visit)
        return times

    def linearise(self, slowness: Array, errors: Array | None = None) -> CurvedRays:
        """Times and their derivative along rays traced down the gradient of the times.

        A ray whose time differs from the first arrival by more than 1 % and more than the datum's
        error gives way to the exact derivative's row.

        Parameters
        ----------
        slowness : array, nodal field
            s/m.
        errors : array, shape (n_data,), optional
            Standard deviations of the data, s.
        """
        padded = self._padded(slowness)
        times = np.empty(self.n_data)
        nodes_of: list[Integers] = [np.empty(0, np.int64)] * self.n_data
        lengths_of: list[Array] = [np.empty(0)] * self.n_data
        replaced = np.zeros(self.n_data, dtype=bool)
        layout = self._layout

        def visit(marcher: Marcher, source: int, data: Integers) -> None:
            times[data] = marcher.times(data)
            lengths, row = np.zeros(padded.size), np.empty(padded.size, np.int64)
            for datum in data:
                touched, time = trace(
                    padded,
                    marcher.field,
                    layout.sources[source],
                    layout.spacing,
                    layout.receivers[datum],
                    lengths,
                    row,
                )
                nodes = row[:touched]
                nodes_of[datum], lengths_of[datum] = layout.node(nodes), lengths[nodes]
                lengths[nodes] = 0.0
                allowed = max(_ASTRAY * times[datum], 0.0 if errors is None else errors[datum])
                replaced[datum] = not abs(time - times[datum]) <= allowed
            astray = data[replaced[data]]
            if astray.size:
                exact = ArrivalDerivative(layout, padded, {source: marcher.kept()}, times, threads=1)
                for datum in astray:
                    dense = exact.rows(np.array([datum])).rmatvec(np.ones(1))
                    nodes = np.flatnonzero(np.abs(dense) > _NEGLIGIBLE * np.abs(dense).max())
                    nodes_of[datum], lengths_of[datum] = nodes, dense[nodes]

        self._each_source(padded, visit)
        ends = np.cumsum([0, *(nodes.size for nodes in nodes_of)])
        entries = (np.concatenate(lengths_of), np.concatenate(nodes_of), ends)
        matrix = csr_array(entries, shape=(self.n_data, layout.grid.n_nodes))
        return CurvedRays(matrix, times, replaced)

    def rays(self, slowness: Array) -> tuple[Array, ...]:
        """The ray of each datum, corners from its start to its end, shape (n_corners, 2), m.

        A ray that tracing loses, as `linearise` finds out too, has no corners.
        """
        layout, rays = self._layout, [np.empty((0, 2))] * self.n_data
        spacing, stride = layout.spacing, layout.padded_shape[1]

        def visit(marcher: Marcher, source: int, data: Integers) -> None:
            for datum in data:
                place, receiver = layout.sources[source], layout.receivers[datum]
                corners = follow(stride, marcher.field, place, spacing, receiver)
                ray = np.array(layout.grid.origin) + (corners - PAD) * spacing
                # The march may have begun at the datum's end.
                if len(ray):
                    first, last = np.linalg.norm(ray[[0, -1]] - self._starts[datum], axis=1)
                    rays[datum] = ray if first < last else ray[::-1]

        self._each_source(self._padded(slowness), visit)
        return tuple(rays)

    def differentiate(self, slowness: Array) -> ArrivalDerivative:
        """Times and their exact derivative, at a cost of one march for each product and source."""
        padded = self._padded(slowness)
        times, marched = np.empty(self.n_data), dict[int, Marched]()

        def visit(marcher: Marcher, source: int, data: Integers) -> None:
            times[data] = marcher.times(data)
            marched[source] = marcher.kept()

        self._each_source(padded, visit)
        return ArrivalDerivative(self._layout, padded, marched, times, self._threads)

    def _padded(self, slowness: Array) -> Array:
        slowness = np.asarray(slowness, dtype=np.float64).reshape(-1)
        if not (np.all(slowness > 0) and np.all(np.isfinite(slowness))):
            raise ValueError(f"slowness must be positive and finite; the smallest is {slowness.min():g} s/m")
        return self._layout.pad(slowness[:, None]).reshape(self._layout.padded_shape)

    def _each_source(self, padded: Array, visit: Callable[[Marcher, int, Integers], None]) -> None:
        def work(sources: list[int]) -> None:
            marcher = Marcher(self._layout, padded)
            for source in sources:
                marcher.march(source)
                visit(marcher, source, self._layout.data_of(source))

        run_blocks([partial(work, sources) for sources in self._layout.blocks()], self._threads)


class CurvedRays(LinearOperator):
    """Integrals of a nodal field along the rays of first arrivals: the derivative of their times.

    Made by `TravelTimes.linearise`.

    Attributes
    ----------
    times : array, shape (n_data,)
        First arrivals at the slowness that the rays belong to, s.
    replaced : bool array, shape (n_data,)
        Where tracing failed and the row is the exact derivative's.

    Notes
    -----
    Forward and adjoint, with bilinear basis functions phi_j; by Fermat's principle the rays' own
    change adds nothing to first order:

    .. math::
        d_i = \\int_{ray\\,i} \\sum_j m_j \\phi_j \\, ds, \\qquad
        m_j = \\sum_i d_i \\int_{ray\\,i} \\phi_j \\, ds
    """

    def __init__(self, matrix: csr_array, times: Array, replaced: NDArray[np.bool_]) -> None:
        self.times, self.replaced = times, replaced
        self._matrix = matrix
        super().__init__(dtype=np.dtype(np.float64), dims=matrix.shape[1:], dimsd=matrix.shape[:1])

    def rows(self, index: Integers) -> CurvedRays:
        """The operator of some data only."""
        return CurvedRays(self._matrix[index], self.times[index], self.replaced[index])

    def scaled(self, data: Array, nodes: Array) -> CurvedRays:
        """The derivative of ``data`` times the times by an unknown whose unit changes slowness by ``nodes``.

        Shapes (n_data,) and (n_nodes,).
        """
        matrix = diags_array(data) @ self._matrix @ diags_array(nodes)
        return CurvedRays(csr_array(matrix), data * self.times, self.replaced)

    def _matvec(self, x: Array) -> Array:
        return np.asarray(self._matrix @ x)

    def _rmatvec(self, x: Array) -> Array:
        return np.asarray(self._matrix.T @ x)

    _matmat, _rmatmat = _matvec, _rmatvec
