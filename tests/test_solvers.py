"""Laws of the iterations: those of scipy, minimal over Krylov spaces, and told by their history."""

from __future__ import annotations

from itertools import islice, pairwise

import numpy as np
import pytest
from numpy.testing import assert_allclose, assert_array_equal
from pylops import LinearOperator, MatrixMult
from scipy.sparse.linalg import lsqr as scipy_lsqr

from stillground.grid import Grid
from stillground.ground import Blob, Ground
from stillground.operators.prior_root import PriorRoot
from stillground.operators.straight_rays import StraightRays
from stillground.progress import finish
from stillground.protocols import Iterate, Measurement, Solver
from stillground.solve import Run, iterate
from stillground.solve.cgls import cgls
from stillground.solve.lsqr import lsqr
from stillground.standard_form import standard_form

Problem = tuple[LinearOperator, np.ndarray]
solvers = pytest.mark.parametrize("solver", [cgls, lsqr])


def run(solver: Solver, operator: LinearOperator, b: np.ndarray, iterations: int, **options: int) -> Run:
    (found,) = finish(iterate(solver, operator, b[:, None], iterations, **options))
    return found


def iterates(solver: Solver, problem: Problem, last: int) -> list[Iterate]:
    operator, b = problem
    return list(islice(solver(operator, b.reshape(len(b), -1)), last + 1))


@pytest.fixture(scope="module")
def crosshole() -> Problem:
    """Crosshole rays over two blobs, in standard form, a signal of some ten times the noise."""
    grid = Grid((0.0, -12.0), (0.25, 0.25), (37, 49))
    depths = np.linspace(-11.5, -0.5, 20)
    starts = np.column_stack([np.zeros(400), np.repeat(depths, 20)])
    ends = np.column_stack([np.full(400, 9.0), np.tile(depths, 20)])
    ground = Ground(0.0, (Blob(1.0, (4.0, -5.0), (1.5, 1.0)), Blob(-1.0, (6.0, -9.0), (1.5, 1.0))))
    data = ground.line_integrals(starts, ends) + np.random.default_rng(0).normal(0, 0.05, 400)
    measurement = Measurement(StraightRays(grid, starts, ends), data, np.full(400, 0.05))
    standard = standard_form(measurement, PriorRoot(grid, (2.0, 1.0), 1.0), np.zeros(grid.n_nodes))
    return standard.operator, standard.b


@pytest.fixture(scope="module")
def integration() -> Problem:
    """The integration operator by the trapezoid rule under a prior of smoothness 2: singular values
    fall with the third power of their number."""
    n = 256
    grid = Grid((0.0,), (1 / n,), (n + 1,))
    matrix = np.tril(np.ones((n + 1, n + 1))) - 0.5 * np.eye(n + 1)
    matrix[:, 0] -= 0.5
    matrix /= n
    data = (1 - np.cos(5 * grid.axes[0])) / 5 + np.random.default_rng(1).normal(0, 0.01, n + 1)
    measurement = Measurement(MatrixMult(matrix), data, np.full(n + 1, 0.01))
    standard = standard_form(measurement, PriorRoot(grid, (0.2,), 2.0), np.zeros(n + 1))
    return MatrixMult(standard.operator.matmat(np.eye(n + 1))), standard.b


def dense(rows: int, columns: int, seed: int = 3) -> Problem:
    rng = np.random.default_rng(seed)
    return MatrixMult(rng.normal(size=(rows, columns))), 5 * rng.normal(size=rows)


def krylov_minimisers(matrix: np.ndarray, b: np.ndarray, last: int) -> list[np.ndarray]:
    """Least squares over the spaces of (A'A)^j A'b by orthonormal bases of both sides, kept twice."""
    left, right, found = [b / np.linalg.norm(b)], [], []
    for _ in range(last):
        v = matrix.T @ left[-1]
        for _ in range(2):
            for known in right:
                v = v - (known @ v) * known
        right.append(v / np.linalg.norm(v))
        u = matrix @ right[-1]
        for _ in range(2):
            for known in left:
                u = u - (known @ u) * known
        left.append(u / np.linalg.norm(u))
        basis = np.array(right).T
        projected = np.array(left) @ (matrix @ basis)
        found.append(basis @ np.linalg.lstsq(projected, np.array(left) @ b)[0])
    return found


@solvers
def test_iterates_are_those_of_scipy(solver: Solver, crosshole: Problem) -> None:
    """Outside source: `scipy.sparse.linalg.lsqr` (Paige & Saunders 1982).

    Beyond the first it is scipy's that loses the orthogonality of its vectors.
    """
    operator, b = crosshole
    for found in iterates(solver, crosshole, 8)[1:]:
        expected = scipy_lsqr(operator, b, iter_lim=found.index, atol=0, btol=0, conlim=0)[0]
        error = np.linalg.norm(found.solution[:, 0] - expected)
        assert error <= 1e-10 * np.linalg.norm(expected), found.index


def test_lsqr_stays_the_minimiser_over_krylov_spaces(integration: Problem) -> None:
    """Outside source: least squares over a basis orthogonalised twice on both sides."""
    operator, b = integration
    expected = krylov_minimisers(operator.A, b, 30)
    for found in iterates(lsqr, integration, 30)[1:]:
        best = expected[found.index - 1]
        error = np.linalg.norm(found.solution[:, 0] - best)
        assert error <= 1e-10 * np.linalg.norm(best), found.index


def test_cgls_is_the_minimiser_over_krylov_spaces_while_it_is_orthogonal(integration: Problem) -> None:
    operator, b = integration
    for found, best in zip(
        iterates(cgls, integration, 4)[1:], krylov_minimisers(operator.A, b, 4), strict=True
    ):
        assert np.linalg.norm(found.solution[:, 0] - best) <= 1e-8 * np.linalg.norm(best), found.index


@solvers
def test_iterate_zero_is_the_prior_mean(solver: Solver, crosshole: Problem) -> None:
    operator, b = crosshole
    first = iterates(solver, crosshole, 0)[0]
    assert first.index == 0
    assert not first.solution.any()
    assert_array_equal(first.residual[:, 0], b)
    assert first.gradient_norm == pytest.approx(np.linalg.norm(operator.rmatvec(b)), rel=1e-10)


@solvers
def test_iterates_are_read_only_and_independent(solver: Solver) -> None:
    operator, b = dense(12, 9)
    columns = np.column_stack([b, -b])
    before = columns.copy()
    seen = []
    for step in islice(solver(operator, columns), 5):
        assert not step.solution.flags.writeable
        assert not step.residual.flags.writeable
        seen.append((step, step.solution.copy(), step.residual.copy()))
    for step, solution, residual in seen:
        assert_array_equal(step.solution, solution)
        assert_array_equal(step.residual, residual)
    assert not any(np.shares_memory(a.solution, b.solution) for (a, *_), (b, *_) in pairwise(seen))
    assert_array_equal(columns, before)


@solvers
def test_residuals_and_gradients_are_those_of_the_solutions(solver: Solver, crosshole: Problem) -> None:
    operator, b = crosshole
    for step in iterates(solver, crosshole, 12):
        expected = b - operator @ step.solution[:, 0]
        assert_allclose(step.residual[:, 0], expected, rtol=0, atol=1e-10 * np.linalg.norm(b))
        gradient = np.linalg.norm(operator.rmatvec(expected))
        assert step.gradient_norm == pytest.approx(gradient, rel=1e-6)


@solvers
def test_residuals_fall_and_solutions_grow(solver: Solver, crosshole: Problem) -> None:
    """Outside source: Hestenes & Stiefel (1952), from memory."""
    history = run(solver, *crosshole, 40).history
    assert np.all(np.diff(history.residual_norm) < 0)
    assert np.all(np.diff(history.solution_norm) > 0)


@solvers
def test_several_columns_equal_single_runs(solver: Solver) -> None:
    operator, b = dense(30, 20)
    columns = np.column_stack([b, np.zeros(30), b + np.sin(np.arange(30)), -3 * b])
    together = iterates(solver, (operator, columns), 10)
    for q in (0, 2, 3):
        for both, alone in zip(together, iterates(solver, (operator, columns[:, q]), 10), strict=True):
            scale = np.linalg.norm(alone.solution) + 1e-300
            assert np.linalg.norm(both.solution[:, q] - alone.solution[:, 0]) <= 1e-9 * scale
    assert not together[-1].solution[:, 1].any()


def repeated_rows() -> Problem:
    matrix = np.random.default_rng(5).normal(size=(8, 30))
    return MatrixMult(np.tile(matrix, (3, 1))), np.random.default_rng(6).normal(size=24)


def smooth_kernel(width: float) -> Problem:
    """A Gaussian kernel: its singular values come to rounding within some twenty."""
    x = np.linspace(0, 1, 120)
    matrix = np.exp(-(((x[:, None] - x) / width) ** 2))
    return MatrixMult(matrix), matrix @ np.sin(5 * x) + np.random.default_rng(5).normal(size=120)


@solvers
@pytest.mark.parametrize(
    "problem",
    [dense(6, 40), dense(40, 6), dense(60, 30), dense(20, 20), dense(1, 5), dense(5, 1), repeated_rows()],
    ids=["wide", "tall", "tall and large", "square", "one datum", "one unknown", "repeated rows"],
)
def test_where_the_space_is_used_up_the_least_squares_solution_is_kept(
    solver: Solver, problem: Problem
) -> None:
    """Outside source: `numpy.linalg.pinv`. Repeated measurements make rows of equal numbers."""
    operator, b = problem
    expected = np.linalg.pinv(operator.A) @ b
    found = run(solver, operator, b, 80)
    assert found.history.last < 80
    if solver is lsqr:
        assert found.history.last <= np.linalg.matrix_rank(operator.A)
    for solution in found.solutions:
        assert np.linalg.norm(solution) <= (1 + 1e-6) * np.linalg.norm(expected)
    assert_allclose(found.solutions[-1], expected, rtol=0, atol=1e-5 * np.linalg.norm(expected))
    assert np.all(np.diff(found.history.residual_norm) <= 1e-9 * np.linalg.norm(b))
    assert np.all(np.isfinite(found.history.degrees_of_freedom))
    assert np.all(np.diff(found.history.degrees_of_freedom) >= 0)
    assert found.history.degrees_of_freedom[-1] <= 2 * min(operator.shape)


@solvers
@pytest.mark.parametrize("width", [0.1, 0.2, 0.3, 0.4])
def test_residuals_do_not_grow_where_singular_values_come_to_rounding(solver: Solver, width: float) -> None:
    """In no column: one may be used up before the others."""
    operator, b = smooth_kernel(width)
    noise = 1e6 * np.random.default_rng(2).normal(size=(120, 40))
    steps = iterates(solver, (operator, np.column_stack([b, noise])), 40)
    norms = np.array([np.linalg.norm(step.residual, axis=0) for step in steps])
    assert len(steps) >= 10
    assert np.all(np.diff(norms, axis=0) <= 1e-9 * norms[0])


@solvers
def test_a_column_that_is_used_up_stands_still_while_others_go_on(solver: Solver) -> None:
    """It sees a block of five unknowns alone, the first column the whole."""
    large, small = dense(90, 60)[0].A, dense(20, 5)[0].A
    matrix = np.block([[large, np.zeros((90, 5))], [np.zeros((20, 60)), small]])
    b = np.random.default_rng(4).normal(size=(110, 2))
    b[:90, 1] = 0
    steps = iterates(solver, (MatrixMult(matrix), b), 45)
    best = np.linalg.pinv(matrix) @ b[:, 1]
    assert len(steps) == 46
    for step in steps[5:]:
        assert_allclose(step.solution[:, 1], best, rtol=0, atol=1e-9)


@solvers
def test_zero_data_stay_at_zero_while_their_disturbed_copies_go_on(solver: Solver) -> None:
    operator, b = dense(6, 9)
    assert len(iterates(solver, (operator, 0 * b), 20)) == 1
    found = run(solver, operator, 0 * b, 20)
    assert not found.history.solution_norm.any()
    assert not found.solution(5.0).any()
    assert not found.residual(0.0).any()


@solvers
def test_the_history_tells_norms_of_iterates_and_steps(solver: Solver, crosshole: Problem) -> None:
    found = run(solver, *crosshole, 6)
    history, solutions, residuals = found.history, np.array(found.solutions), found.residuals
    assert history.n_data == 400
    assert history.last == 6
    assert_allclose(history.solution_norm, np.linalg.norm(solutions, axis=1))
    assert_allclose(history.residual_norm, np.linalg.norm(residuals, axis=1))
    assert_allclose(history.step_norm[1:], np.linalg.norm(np.diff(solutions, axis=0), axis=1))
    assert_allclose(history.residual_step[1:], np.linalg.norm(np.diff(residuals, axis=0), axis=1))
    assert history.step_norm[0] == history.residual_step[0] == 0
    assert_allclose(history.chi_square, np.mean(residuals**2, axis=1))


@solvers
def test_the_history_does_not_depend_on_where_it_ends(solver: Solver, crosshole: Problem) -> None:
    short, long = (run(solver, *crosshole, last).history for last in (4, 7))
    for name in ("residual_norm", "residual_step", "solution_norm", "step_norm", "degrees_of_freedom"):
        assert_array_equal(getattr(short, name), getattr(long.upto(4), name))


@solvers
def test_fractional_iterates_lie_between_their_neighbours(solver: Solver, crosshole: Problem) -> None:
    operator, b = crosshole
    found = run(solver, *crosshole, 5)
    assert_allclose(found.solution(2.25), 0.75 * found.solutions[2] + 0.25 * found.solutions[3], rtol=1e-14)
    for place in (0.0, 2.0, 2.25, 5.0):
        expected = b - operator @ found.solution(place)
        assert_allclose(found.residual(place), expected, rtol=0, atol=1e-10 * np.linalg.norm(b))
    assert_array_equal(found.solution(-1.0), found.solutions[0])
    assert_array_equal(found.solution(9.5), found.solutions[5])
    assert_array_equal(found.residual(9.5), found.residuals[5])


@solvers
def test_iterates_beyond_the_memory_budget_are_made_again(solver: Solver, crosshole: Problem) -> None:
    kept = run(solver, *crosshole, 20)
    some = run(solver, *crosshole, 20, kept_bytes=3 * 8 * crosshole[0].shape[1])
    none = run(solver, *crosshole, 20, kept_bytes=0)
    assert [len(found.solutions) for found in (kept, some, none)] == [21, 3, 1]
    for place in (0.0, 0.5, 1.5, 2.0, 2.5, 7.0, 19.75, 20.0, 31.0):
        assert_array_equal(some.solution(place), kept.solution(place))
        assert_array_equal(none.solution(place), kept.solution(place))


@solvers
def test_kept_solutions_are_read_only(solver: Solver) -> None:
    for solution in run(solver, *dense(6, 9), 3).solutions:
        with pytest.raises(ValueError, match="read-only"):
            solution[0] = 1.0


def test_progress_counts_iterations(crosshole: Problem) -> None:
    operator, b = crosshole
    seen = [(step.done, step.total) for step in iterate(lsqr, operator, b[:, None], 4)]
    assert seen == [(k, 4) for k in range(5)]


def test_degrees_of_freedom_are_the_trace_of_the_map_from_data_to_fit() -> None:
    """Outside source: the exact trace, by central differences of the fit in every datum.

    The signal is 300 times the noise, so that a disturbance of the noise's size is a derivative. The
    mean of twenty estimates may be off by four of its own standard errors. Not with CGLS: where it
    has lost its orthogonality its iterates have no derivative.
    """
    n, last = 40, 12
    rng = np.random.default_rng(2)
    left, right = (np.linalg.qr(rng.normal(size=(size, n)))[0] for size in (n, 60))
    values = 10 / np.arange(1, n + 1.0)
    operator = MatrixMult(left @ np.diag(values) @ right.T)
    b = 300 * left @ (values / values[0] * rng.normal(size=n)) + rng.normal(size=n)
    small = 1e-3
    columns = b[:, None] + small * np.hstack([np.eye(n), -np.eye(n)])
    exact = []
    for step in iterates(lsqr, (operator, columns), last):
        fit = columns - step.residual
        exact.append(np.trace(fit[:, :n] - fit[:, n:]) / (2 * small))
    found = np.array([run(lsqr, operator, b, last, seed=s).history.degrees_of_freedom for s in range(20)])
    error = np.abs(found.mean(axis=0) - exact)
    assert np.all(error <= 4 * found.std(axis=0) / np.sqrt(20) + 1e-6)
    assert found.mean(axis=0)[5] > 15
