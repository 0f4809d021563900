"""Readings of ground-conductivity meters over a section as a `pylops.LinearOperator`."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray
from pylops import LinearOperator
from scipy.sparse import csr_matrix

from stillground.errors import GridError
from stillground.grid import Grid
from stillground.kernels.cumulative_response import node_weights

Array = NDArray[np.float64]
Integers = NDArray[np.int64]


class GroundConductivity(LinearOperator):
    """Exact responses at low induction number to bilinear nodal fields of conductivity, level by station.

    Below each station the ground is taken as level layers, as the cumulative response has it. Below the grid
    it goes on as at the grid's lowest node; above the ground's surface there is none.

    Parameters
    ----------
    grid : Grid
        Two-dimensional, (distance, elevation).
    distance, surface : array, shape (n_data,)
        Where along the section each reading was taken, and the elevation of the ground there, m.
    height : array, shape (n_data,)
        Of the coils above the ground, m, from 0 up.
    spacing : array, shape (n_data,)
        Between the coils, m, positive.
    vertical : array of bool, shape (n_data,)
        Whether the dipoles are vertical; else horizontal.
    tail : bool
        False leaves out the ground below the grid.

    Raises
    ------
    GridError
        When the grid is not two-dimensional, or a station stands outside it.

    Notes
    -----
    With z_k the depth of node k below the coils over their spacing, hat functions h_k, and the columns of
    nodes i and i + 1 on both sides of the station:

    .. math::
        d = \\sum_k w_k \\left[(1 - a) m_{i,k} + a m_{i+1,k}\\right], \\qquad
        w_k = -\\int_{z_0}^\\infty R'(z) h_k(z) dz

    and the adjoint adds ``(1 - a) w_k d`` and ``a w_k d`` to these nodes. Products share the columns
    interpolated at a station between its readings.

    References
    ----------
    McNeill (1980), Electromagnetic terrain conductivity measurement at low induction numbers.
    """

    def __init__(
        self,
        grid: Grid,
        distance: Array,
        surface: Array,
        height: Array,
        spacing: Array,
        vertical: NDArray[np.bool_],
        *,
        tail: bool = True,
    ) -> None:
        if len(grid.shape) != 2:
            raise GridError(f"a section needs a grid of 2 axes; got {len(grid.shape)}")
        along, elevation = grid.axes
        rounding = 1e-9 * max(grid.spacing)
        for axis, places, nodes in (("distance", distance, along), ("elevation", surface, elevation)):
            outside = (places < nodes[0] - rounding) | (places > nodes[-1] + rounding)
            if outside.any() or not np.isfinite(places).all():
                where = float(places[np.argmax(outside | ~np.isfinite(places))])
                raise GridError(
                    f"a station at {axis} {where:.6g} m stands outside the grid, {nodes[0]:.6g} to "
                    f"{nodes[-1]:.6g} m"
                )
        self._grid, self._tail = grid, tail
        self._data: tuple[Any, ...] = (distance, surface, height, spacing, vertical)
        stations, station = np.unique(distance, return_inverse=True)
        order = np.argsort(station, kind="stable")
        counts = np.bincount(station)
        slot = np.empty_like(station)
        slot[order] = np.arange(station.size) - np.repeat(np.cumsum(counts) - counts, counts)
        self._place = (station, slot)
        depth = ((surface + height)[:, None] - elevation) / spacing[:, None]
        self._weights = np.zeros((stations.size, int(counts.max()), elevation.size))
        self._weights[self._place] = node_weights(depth, height / spacing, vertical, tail=tail)

        at = np.clip((stations - along[0]) / grid.spacing[0], 0, along.size - 1)
        before = np.minimum(at.astype(np.int64), along.size - 2)
        share = np.column_stack([1 - (at - before), at - before])
        columns = np.column_stack([before, before + 1])
        rows = 2 * np.arange(stations.size + 1)
        across = csr_matrix((share.ravel(), columns.ravel(), rows), shape=(stations.size, along.size))
        self._across, self._back = across, across.T.tocsr()
        super().__init__(dtype=np.dtype(np.float64), dims=(grid.n_nodes,), dimsd=(distance.size,))

    def rows(self, index: Integers) -> GroundConductivity:
        """The operator of some data only."""
        return GroundConductivity(self._grid, *(each[index] for each in self._data), tail=self._tail)

    def _matmat(self, X: Array) -> Array:
        n_along, n_up = self._grid.shape
        below = (self._across @ X.reshape(n_along, -1)).reshape(-1, n_up, X.shape[1])
        return np.asarray((self._weights @ below)[self._place])

    def _rmatmat(self, X: Array) -> Array:
        n_stations, n_slots, _ = self._weights.shape
        readings = np.zeros((n_stations, n_slots, X.shape[1]))
        readings[self._place] = X
        below = self._weights.transpose(0, 2, 1) @ readings
        return np.asarray((self._back @ below.reshape(n_stations, -1)).reshape(-1, X.shape[1]))

    def _matvec(self, x: Array) -> Array:
        return self._matmat(x.reshape(-1, 1)).reshape(-1)

    def _rmatvec(self, x: Array) -> Array:
        return self._rmatmat(x.reshape(-1, 1)).reshape(-1)
