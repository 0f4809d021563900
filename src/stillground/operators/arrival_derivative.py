"""The exact derivative of marched first-arrival times as a `pylops.LinearOperator`."""

from __future__ import annotations

from collections.abc import Mapping
from functools import partial

import numpy as np
from numpy.typing import NDArray
from pylops import LinearOperator

from stillground.kernels.arrival_sweeps import adjoint, tangent
from stillground.kernels.blocks import run_blocks
from stillground.operators.marching import Layout, Marched

Array = NDArray[np.float64]
Integers = NDArray[np.int64]

# Kernels are compiled for each number of columns, in seconds, and gain nothing beyond a few of them.
_TOGETHER = 4


class ArrivalDerivative(LinearOperator):
    """Derivative of first-arrival times with respect to slowness, exact for the discrete times.

    Made by `TravelTimes.differentiate`. A product runs once over the nodes for each source; 13 bytes
    are kept for each node and source.

    Attributes
    ----------
    times : array, shape (n_data,)
        First arrivals at the slowness of the derivative, s. They are homogeneous of degree one:
        the product of this operator with that slowness.

    Notes
    -----
    Forward and adjoint, with t_i the marched time of datum i as a function of nodal slowness s:

    .. math::
        d_i = \\sum_j \\frac{\\partial t_i}{\\partial s_j} m_j, \\qquad
        m_j = \\sum_i \\frac{\\partial t_i}{\\partial s_j} d_i
    """

    def __init__(
        self,
        layout: Layout,
        slowness: Array,
        marched: Mapping[int, Marched],
        times: Array,
        threads: int | None = None,
    ) -> None:
        self.times = times
        self._layout, self._slowness, self._marched, self._threads = layout, slowness, marched, threads
        super().__init__(dtype=np.dtype(np.float64), dims=(layout.grid.n_nodes,), dimsd=(times.size,))

    def rows(self, index: Integers) -> ArrivalDerivative:
        """The operator of some data only."""
        layout = self._layout.rows(index)
        return ArrivalDerivative(layout, self._slowness, self._marched, self.times[index], self._threads)

    def _matmat(self, X: Array) -> Array:
        X = np.asarray(X, dtype=np.float64)
        out = np.empty((self.shape[0], X.shape[1]))
        for first in range(0, X.shape[1], _TOGETHER):
            columns = slice(first, first + _TOGETHER)
            change = self._layout.pad(X[:, columns])
            blocks = [partial(self._onwards, each, change, out[:, columns]) for each in self._layout.blocks()]
            run_blocks(blocks, self._threads)
        return out

    def _rmatmat(self, X: Array) -> Array:
        X = np.asarray(X, dtype=np.float64)
        out = np.empty((self.shape[1], X.shape[1]))
        for first in range(0, X.shape[1], _TOGETHER):
            data = X[:, first : first + _TOGETHER]
            blocks = self._layout.blocks()
            parts = np.zeros((len(blocks), self._slowness.size, data.shape[1]))
            work = zip(blocks, parts, strict=True)
            run_blocks([partial(self._backwards, each, data, part) for each, part in work], self._threads)
            out[:, first : first + _TOGETHER] = self._layout.crop(parts.sum(axis=0))
        return out

    def _onwards(self, sources: list[int], change: Array, out: Array) -> None:
        layout, kernel, result = self._layout, tangent(change.shape[1]), np.empty_like(change)
        for source in sources:
            left, place = self._marched[source], layout.sources[source]
            kernel(self._slowness, place, layout.spacing, left.tau, left.code, left.order, change, result)
            data = layout.data_of(source)
            out[data] = (layout.weights[data, :, None] * result[layout.nodes[data]]).sum(axis=1)

    def _backwards(self, sources: list[int], data: Array, result: Array) -> None:
        layout, kernel, weight = self._layout, adjoint(data.shape[1]), np.empty_like(result)
        for source in sources:
            left, place, mine = self._marched[source], layout.sources[source], layout.data_of(source)
            weight[:] = 0.0
            np.add.at(weight, layout.nodes[mine], layout.weights[mine, :, None] * data[mine, None, :])
            kernel(self._slowness, place, layout.spacing, left.tau, left.code, left.order, weight, result)

    def _matvec(self, x: Array) -> Array:
        return self._matmat(x.reshape(-1, 1)).reshape(-1)

    def _rmatvec(self, x: Array) -> Array:
        return self._rmatmat(x.reshape(-1, 1)).reshape(-1)
