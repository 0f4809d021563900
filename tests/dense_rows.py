"""A dense matrix that offers its rows, for solvers that go through the data by parts."""

from __future__ import annotations

import numpy as np
from pylops import LinearOperator, MatrixMult

from stillground.protocols import Array, Integers


class DenseRows(MatrixMult):  # type: ignore[misc]
    """``A`` with data in groups, and ground = solution within bounds, if any."""

    def __init__(self, A: Array, source: Integers, bounds: tuple[float, float] | None = None) -> None:
        super().__init__(A)
        self.groupings = {"source": source}
        self._bounds = bounds

    def rows(self, index: Integers) -> LinearOperator:
        return MatrixMult(self.A[index])

    def clip(self, solution: Array) -> Array:
        return solution if self._bounds is None else np.clip(solution, *self._bounds)


def consistent(n_data: int = 12, n_unknowns: int = 20, seed: int = 5) -> tuple[DenseRows, Array]:
    """Three sources over fewer data than unknowns, and data that some solution meets: shape (n_data, 1)."""
    random = np.random.default_rng(seed)
    A = random.standard_normal((n_data, n_unknowns))
    operator = DenseRows(A, np.arange(n_data) // 4)
    return operator, A @ random.standard_normal((n_unknowns, 1))
