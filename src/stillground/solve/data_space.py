"""The same iterations on as many unknowns as there are data."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from pylops import LinearOperator, MatrixMult
from scipy.linalg import cholesky, solve_triangular

from stillground.protocols import Array, Integers, RowBlocks
from stillground.solve.gram import gram

MOST_DATA = 2000
"""Beyond this many data the dense matrix costs more than it saves."""

_RIDGE = 1e-15


class DataSpace(LinearOperator):  # type: ignore[misc]
    """An operator C with ``C C^T = A A^T``: iterations on it have the residuals of those on A.

    Solutions y are coordinates of ``x = A^T C^-T y`` in an orthonormal basis of the rows of A, with C the
    Cholesky factor of ``A A^T``; their norms are those of x. Making it takes n_data products each way;
    after that a product costs n_data^2 whatever the grid. Singular values under some 1e-7 of the
    largest are lost, as in any matrix of normal equations.

    Parameters
    ----------
    operator : pylops.LinearOperator, shape (n_data, n_unknowns)
        Offered groupings are kept; bounds are not, since they are seen on the ground only.
    """

    def __init__(self, operator: LinearOperator) -> None:
        self.groupings: Mapping[str, Integers] = operator.groupings if isinstance(operator, RowBlocks) else {}
        n_data = operator.shape[0]
        products = gram(operator)
        # Repeated data make the matrix singular; this much more on its diagonal is under its rounding.
        ridge = _RIDGE * float(np.trace(products))
        self._operator = operator
        self._matrix = cholesky(products + ridge * np.eye(n_data), lower=True)
        super().__init__(dtype=np.dtype(np.float64), dims=(n_data,), dimsd=(n_data,))

    def _matmat(self, X: Array) -> Array:
        return np.asarray(self._matrix @ X)

    def _rmatmat(self, X: Array) -> Array:
        return np.asarray(self._matrix.T @ X)

    def _matvec(self, x: Array) -> Array:
        return np.asarray(self._matrix @ x)

    def _rmatvec(self, x: Array) -> Array:
        return np.asarray(self._matrix.T @ x)

    def rows(self, index: Integers) -> LinearOperator:
        """The operator of some data only."""
        return MatrixMult(self._matrix[index])

    def clip(self, solution: Array) -> Array:
        """The same solution: there are no bounds here."""
        return solution

    def back(self, solution: Array) -> Array:
        """Solutions of the original operator, shape (n_unknowns, n_columns), from those here."""
        dual = solve_triangular(self._matrix, solution, lower=True, trans="T")
        return np.asarray(self._operator.rmatmat(dual))
