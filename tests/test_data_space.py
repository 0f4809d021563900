"""The data space does what the model space does; what iterates say of themselves is true."""

from __future__ import annotations

from fractions import Fraction
from itertools import islice
from typing import Any

import numpy as np
import pytest

from dense_rows import DenseRows, consistent
from stillground.progress import finish
from stillground.solve import DataSpace, back, iterate
from stillground.solve.block_kaczmarz import block_kaczmarz
from stillground.solve.cgls import cgls
from stillground.solve.kaczmarz import kaczmarz
from stillground.solve.lsqr import lsqr
from stillground.testing.problem import small_problem


@pytest.mark.parametrize("solver", [lsqr, cgls, block_kaczmarz])
def test_the_data_space_gives_the_residuals_and_iterates_of_the_model_space(solver: Any) -> None:
    operator, b = small_problem()
    space = DataSpace(operator)
    columns = np.column_stack([b, b[::-1]])
    pairs = list(zip(solver(operator, columns), solver(space, columns), range(16), strict=False))
    assert len(pairs) == 16
    size = np.linalg.norm(pairs[-1][0].solution)
    for there, here, _ in pairs:
        np.testing.assert_allclose(here.residual, there.residual, atol=1e-8 * np.linalg.norm(b))
        np.testing.assert_allclose(back(space, here.solution), there.solution, atol=1e-8 * size)
        np.testing.assert_allclose(
            np.linalg.norm(here.solution, axis=0), np.linalg.norm(there.solution, axis=0), atol=1e-8 * size
        )


def test_solutions_of_any_other_operator_come_back_as_they_are() -> None:
    operator, _ = consistent()
    x = np.ones((20, 2))
    assert back(operator, x) is x


@pytest.mark.parametrize("solver", [lsqr, cgls])
def test_repeated_rows_are_no_problem(solver: Any) -> None:
    random = np.random.default_rng(2)
    A = np.repeat(random.standard_normal((6, 15)), 2, axis=0)
    b = random.standard_normal((12, 1))
    space = DataSpace(DenseRows(A, np.arange(12) // 4))
    *_, last = islice(solver(space, b), 6 + 1)
    # The least-squares solution of least norm from numpy's singular values.
    least = np.linalg.lstsq(A, b, rcond=None)[0]
    np.testing.assert_allclose(back(space, last.solution), least, atol=1e-6 * np.linalg.norm(least))


def test_several_problems_equal_single_ones() -> None:
    operator, b = small_problem()
    columns = np.column_stack([b, 2 * b[::-1], b + 1])
    together = finish(iterate(lsqr, operator, columns, 10, seed=4))
    for j, run in enumerate(together):
        (alone,) = finish(iterate(lsqr, operator, columns[:, j : j + 1], 10, seed=4))
        for name in ("residual_norm", "solution_norm", "step_norm", "degrees_of_freedom", "error_bound"):
            np.testing.assert_allclose(
                getattr(run.history, name)[1:], getattr(alone.history, name)[1:], rtol=1e-7
            )
        assert run.history.whiteness.keys() == alone.history.whiteness.keys() == {"source", "receiver"}
        np.testing.assert_allclose(run.solution(7.3), alone.solution(7.3), atol=1e-8)


@pytest.mark.parametrize("in_data_space", [False, True])
def test_iterates_beyond_the_memory_are_made_again_to_the_bit(in_data_space: bool) -> None:
    operator, b = small_problem()
    used = DataSpace(operator) if in_data_space else operator
    columns = np.column_stack([b, b[::-1]])
    kept = finish(iterate(lsqr, used, columns, 8))
    tight = finish(iterate(lsqr, used, columns, 8, kept_bytes=0))
    assert [len(run.solutions) for run in (*kept, *tight)] == [9, 9, 1, 1]
    for one, other in zip(kept, tight, strict=True):
        np.testing.assert_array_equal(one.solution(5.25), other.solution(5.25))


@pytest.mark.parametrize("solver", [lsqr, cgls, kaczmarz, block_kaczmarz])
def test_the_solution_is_the_adjoint_of_its_dual(solver: Any) -> None:
    operator, b = small_problem()
    for step in islice(solver(operator, b[:, None]), 11):
        assert step.dual is not None
        np.testing.assert_allclose(operator.rmatmat(step.dual), step.solution, atol=1e-10 * np.linalg.norm(b))


def krylov_polynomial(A: list[list[int]], b: list[int], k: int) -> Fraction:
    """q(0) of the q of degree k - 1 for which x = A^T q(A A^T) b has the least residual, in rationals.

    The coefficients c solve the normal equations of ``sum_j c_j (A A^T)^(j+1) b = b``, by elimination.
    """
    rows = [[Fraction(value) for value in row] for row in A]

    def gram(v: list[Fraction]) -> list[Fraction]:
        down = [sum(row[j] * v[i] for i, row in enumerate(rows)) for j in range(len(rows[0]))]
        return [sum(x * y for x, y in zip(row, down, strict=True)) for row in rows]

    vectors, data = [], [Fraction(value) for value in b]
    last = data
    for _ in range(k):
        last = gram(last)
        vectors.append(last)

    def dot(u: list[Fraction], v: list[Fraction]) -> Fraction:
        return sum((x * y for x, y in zip(u, v, strict=True)), Fraction(0))

    system = [[*(dot(u, v) for v in vectors), dot(u, data)] for u in vectors]
    for i in range(k):
        system[i] = [value / system[i][i] for value in system[i]]
        for j in range(k):
            if j != i:
                factor = system[j][i]
                system[j] = [x - factor * y for x, y in zip(system[j], system[i], strict=True)]
    return system[0][k]


@pytest.mark.parametrize("solver", [lsqr, cgls])
@pytest.mark.parametrize("reorthogonal", [True, False])
def test_the_filter_slope_is_the_polynomial_at_zero(solver: Any, reorthogonal: bool) -> None:
    A = np.random.default_rng(6).integers(-3, 4, (6, 8))
    b = [1, -2, 3, 1, 0, 2]
    operator = DenseRows(A.astype(float), np.zeros(6, dtype=int))
    column = np.array(b, dtype=float)[:, None]
    steps = list(islice(solver(operator, column, reorthogonal=reorthogonal), 5))
    assert steps[0].filter_slope == 0
    for k in range(1, 5):
        assert steps[k].filter_slope == pytest.approx(float(krylov_polynomial(A.tolist(), b, k)), rel=1e-10)
