"""Integrals of a nodal field against given kernels as a `pylops.LinearOperator`."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from pylops import LinearOperator

from stillground.errors import GridError
from stillground.grid import Grid

Array = NDArray[np.float64]
Integers = NDArray[np.int64]


class KernelIntegrals(LinearOperator):
    """Integrals of kernels times a field by the quadrature of a grid.

    Parameters
    ----------
    grid : Grid
    kernels : array, shape (n_data, n_nodes)
        Each kernel's values at the nodes of the grid, flattened, in the unit of the data over that of
        the field and m^n_dimensions.

    Raises
    ------
    GridError
        When the kernels have not as many values as the grid has nodes.

    Notes
    -----
    With w the weights of the grid, forward and adjoint:

    .. math::
        d_i = \\sum_j K_{ij} w_j m_j, \\qquad m_j = w_j \\sum_i K_{ij} d_i

    Examples
    --------
    >>> grid = Grid(origin=(0.0,), spacing=(0.5,), shape=(3,))
    >>> KernelIntegrals(grid, np.array([[1.0, 1.0, 1.0], [0.0, 1.0, 2.0]])) @ np.array([2.0, 2.0, 2.0])
    array([2., 2.])
    """

    def __init__(self, grid: Grid, kernels: Array) -> None:
        if kernels.ndim != 2 or kernels.shape[1] != grid.n_nodes:
            raise GridError(f"kernels of shape (n_data, {grid.n_nodes}) are needed; got {kernels.shape}")
        self._grid = grid
        self._kernels = kernels
        self._weights = grid.weights()[:, None]
        super().__init__(dtype=np.dtype(np.float64), dims=(grid.n_nodes,), dimsd=(kernels.shape[0],))

    def _matmat(self, X: Array) -> Array:
        return np.asarray(self._kernels @ (self._weights * X))

    def _rmatmat(self, X: Array) -> Array:
        return np.asarray(self._weights * (self._kernels.T @ X))

    def _matvec(self, x: Array) -> Array:
        return self._matmat(x.reshape(-1, 1)).reshape(-1)

    def _rmatvec(self, x: Array) -> Array:
        return self._rmatmat(x.reshape(-1, 1)).reshape(-1)

    def rows(self, index: Integers) -> LinearOperator:
        """The operator of some data only."""
        return KernelIntegrals(self._grid, self._kernels[index])
