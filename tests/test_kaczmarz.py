"""The laws of Kaczmarz' methods: projections, limits, orders, bounds, and what is refused."""

from __future__ import annotations

from itertools import islice
from typing import Any

import numpy as np
import pytest
from pylops import MatrixMult

from dense_rows import DenseRows, consistent
from stillground.config import from_mapping
from stillground.errors import ConfigError
from stillground.grid import Grid
from stillground.operators.prior_root import PriorRoot
from stillground.operators.straight_rays import StraightRays
from stillground.protocols import Iterate, Measurement
from stillground.solve.block_kaczmarz import block_kaczmarz
from stillground.solve.blocks import interleaved, sequence
from stillground.solve.kaczmarz import kaczmarz
from stillground.solve.symmetric_kaczmarz import symmetric_kaczmarz
from stillground.standard_form import standard_form


def after(steps: Any, sweeps: int) -> Iterate:
    """The iterate after some sweeps."""
    return next(islice(steps, sweeps, None))


@pytest.mark.parametrize("relaxation", [1.0, 0.4, 1.7])
def test_one_row_is_projected_on_its_plane(relaxation: float) -> None:
    # Kaczmarz (1937): x + relaxation (b - a.x) / |a|^2 a, from x = 0.
    a = np.array([[3.0, -4.0, 12.0]])
    step = after(kaczmarz(DenseRows(a, np.array([0])), np.array([[26.0]]), relaxation=relaxation), 1)
    np.testing.assert_allclose(step.solution[:, 0], relaxation * 26.0 / 169.0 * a[0], rtol=1e-15)
    np.testing.assert_allclose(step.residual, [[26.0 * (1 - relaxation)]], atol=1e-14)


def test_rows_are_projected_on_one_after_the_other() -> None:
    # In a plane, by hand: (0, 0) to the line x = 2, then to the line x + y = 4.
    operator = DenseRows(np.array([[1.0, 0.0], [1.0, 1.0]]), np.array([0, 0]))
    steps = kaczmarz(operator, np.array([[2.0], [4.0]]), order="cyclic")
    np.testing.assert_allclose(after(steps, 1).solution[:, 0], [3.0, 1.0], rtol=1e-15)


def test_a_row_of_zeros_is_passed_over() -> None:
    operator = DenseRows(np.array([[0.0, 0.0], [0.0, 2.0]]), np.array([0, 0]))
    step = after(kaczmarz(operator, np.array([[1.0], [4.0]])), 1)
    np.testing.assert_array_equal(step.solution[:, 0], [0.0, 2.0])


@pytest.mark.parametrize("order", ["cyclic", "golden", "random"])
def test_row_action_ends_at_the_solution_of_least_norm(order: Any) -> None:
    # Tanabe (1971), Numer. Math. 17, from memory: from zero the limit is the minimum-norm solution;
    # that one from numpy.linalg.lstsq (singular values).
    operator, b = consistent()
    least = np.linalg.lstsq(operator.A, b, rcond=None)[0]
    step = after(kaczmarz(operator, b, order=order), 600)
    np.testing.assert_allclose(step.solution, least, atol=1e-9)


def test_one_sweep_of_one_block_is_the_solution_of_least_norm() -> None:
    # Elfving (1980): one block without a ridge is the pseudo-inverse.
    operator, b = consistent()
    least = np.linalg.lstsq(operator.A, b, rcond=None)[0]
    np.testing.assert_allclose(
        after(block_kaczmarz(operator, b, groups=1, ridge=0.0), 1).solution, least, atol=1e-12
    )


def test_blocks_end_at_the_solution_of_least_norm() -> None:
    operator, b = consistent()
    least = np.linalg.lstsq(operator.A, b, rcond=None)[0]
    np.testing.assert_allclose(
        after(block_kaczmarz(operator, b, groups=3, ridge=0.0), 200).solution, least, atol=1e-9
    )


def test_blocks_of_one_datum_without_a_ridge_are_row_action() -> None:
    operator, b = consistent()
    single = DenseRows(operator.A, np.arange(12))
    blocks = after(block_kaczmarz(single, b, groups=12, ridge=0.0), 3)
    rows = after(kaczmarz(single, b), 3)
    np.testing.assert_allclose(blocks.solution, rows.solution, atol=1e-12)


def test_a_block_step_is_the_ridge_formula() -> None:
    # From the docstring, dense: x = A^T (A A^T + ridge tr I)^-1 b for one block from zero.
    operator, b = consistent()
    gram = operator.A @ operator.A.T
    ridged = gram + 2.0 * np.trace(gram) / 12 * np.eye(12)
    wanted = operator.A.T @ np.linalg.solve(ridged, b)
    np.testing.assert_allclose(
        after(block_kaczmarz(operator, b, groups=1, ridge=2.0), 1).solution, wanted, atol=1e-12
    )


def test_symmetric_sweeps_with_gradients_end_at_the_least_squares_solution() -> None:
    # Björck & Elfving (1979): for data that some solution meets; numpy.linalg.lstsq beside it.
    operator, b = consistent()
    least = np.linalg.lstsq(operator.A, b, rcond=None)[0]
    *_, last = islice(symmetric_kaczmarz(operator, b, groups=3, ridge=1.0), 40)
    np.testing.assert_allclose(last.solution, least, atol=1e-8)


def test_gradients_need_no_more_symmetric_sweeps_than_there_are_data() -> None:
    # Conjugate gradients end after as many steps as the matrix has eigenvalues other than zero.
    operator, b = consistent()
    step = after(symmetric_kaczmarz(operator, b, groups=3, ridge=1.0), 12)
    assert np.linalg.norm(step.residual) < 1e-6 * np.linalg.norm(b)


@pytest.mark.parametrize("n", [1, 2, 3, 5, 8, 12, 25, 64, 625])
@pytest.mark.parametrize("order", ["cyclic", "golden", "random"])
def test_a_sweep_visits_every_part_once(n: int, order: Any) -> None:
    np.testing.assert_array_equal(np.sort(sequence(n, order, 0)), np.arange(n))


@pytest.mark.parametrize("n", [5, 8, 12, 25, 64, 625])
def test_golden_neighbours_are_far_apart(n: int) -> None:
    jump = np.diff(sequence(n, "golden", 0)) % n
    assert min(jump.min(), n - jump.max()) >= n / 4, "on the circle of parts"


def test_groups_of_sources_are_interleaved() -> None:
    operator = DenseRows(np.eye(12), np.arange(12) // 2)
    parts = interleaved(operator, 3)
    assert [part.tolist() for part in parts] == [[0, 1, 6, 7], [2, 3, 8, 9], [4, 5, 10, 11]]


@pytest.mark.parametrize("solver", [kaczmarz, block_kaczmarz])
def test_bounds_are_kept_after_every_sweep_in_the_ground(solver: Any) -> None:
    grid = Grid((0.0, 0.0), (0.5, 0.5), (9, 9))
    depths = np.linspace(0.2, 3.8, 6)
    here, there = (g.ravel() for g in np.meshgrid(depths, depths, indexing="ij"))
    starts, ends = np.column_stack([0 * here, here]), np.column_stack([0 * there + 4.0, there])
    rays = StraightRays(grid, starts, ends)
    truth = np.where(np.add.outer(*grid.axes) > 4.0, 3.0, 1.0).reshape(-1)
    measurement = Measurement(
        rays, rays.matvec(truth), np.full(36, 0.05), {"source": np.repeat(np.arange(6), 6)}
    )
    root = PriorRoot(grid, (2.0, 2.0), 2.0)
    bounds = (1.2, 2.6)
    free = standard_form(measurement, root, np.full(grid.n_nodes, 2.0))
    kept = standard_form(measurement, root, np.full(grid.n_nodes, 2.0), bounds)
    loose = free.ground(after(solver(free.operator, free.b[:, None]), 4).solution[:, 0])
    assert loose.min() < 1.15
    assert loose.max() > 2.65, "without bounds it does pass them"
    for step in islice(solver(kept.operator, kept.b[:, None]), 5):
        ground = kept.ground(step.solution[:, 0])
        assert ground.min() > bounds[0] - 1e-9
        assert ground.max() < bounds[1] + 1e-9
        made = kept.b[:, None] - kept.operator.matmat(step.solution)
        np.testing.assert_allclose(step.residual, made, atol=1e-9)


def configured(solver: dict[str, Any], **ground: Any) -> Any:
    """A configuration of the solver asked for."""
    tables = {"spacing": "0.5 m", "correlation": {"horizontal": "4 m", "vertical": "2 m"}, **ground}
    return from_mapping(
        {
            "title": "t",
            "survey": {"kind": "straight-ray", "files": ["a.csv"]},
            "ground": tables,
            "solver": solver,
        }
    )


@pytest.mark.parametrize("method", ["lsqr", "cgls", "symmetric-kaczmarz"])
def test_bounds_with_a_method_that_cannot_keep_them_are_refused(method: str) -> None:
    with pytest.raises(ConfigError, match=rf"ground\.bounds: method = '{method}' cannot keep .* Kaczmarz"):
        configured({"method": method}, bounds=["1500 m/s", "2500 m/s"])


@pytest.mark.parametrize("method", ["kaczmarz", "block-kaczmarz"])
def test_bounds_with_a_method_that_keeps_them_are_taken(method: str) -> None:
    config = configured({"method": method}, bounds=["1500 m/s", "2500 m/s"])
    assert sorted(config.ground.bounds) == pytest.approx([1 / 2500, 1 / 1500])


@pytest.mark.parametrize(
    ("method", "option", "takes"),
    [
        ("lsqr", {"ridge": 1.0}, "it takes reorthogonal"),
        ("kaczmarz", {"groups": 5}, "it takes order, relaxation, seed"),
        ("symmetric-kaczmarz", {"order": "golden"}, "it takes groups, ridge"),
    ],
)
def test_options_that_do_not_apply_are_refused(method: str, option: dict[str, Any], takes: str) -> None:
    with pytest.raises(ConfigError, match=rf"{next(iter(option))} does not apply to .*{takes}"):
        configured({"method": method, **option})


@pytest.mark.parametrize("solver", [kaczmarz, block_kaczmarz, symmetric_kaczmarz])
def test_an_operator_without_rows_is_refused(solver: Any) -> None:
    with pytest.raises(ConfigError, match="the data by parts, which this operator does not offer"):
        next(solver(MatrixMult(np.eye(3)), np.ones((3, 1))))


@pytest.mark.parametrize("solver", [block_kaczmarz, symmetric_kaczmarz])
def test_blocks_of_data_without_groups_are_refused(solver: Any) -> None:
    operator = DenseRows(np.eye(3), np.zeros(3, dtype=int))
    operator.groupings = {}
    with pytest.raises(ConfigError, match="needs data in groups"):
        next(solver(operator, np.ones((3, 1))))


@pytest.mark.parametrize("solver", [block_kaczmarz, symmetric_kaczmarz])
def test_repeated_data_without_a_ridge_are_refused_with_what_to_do(solver: Any) -> None:
    operator = DenseRows(np.ones((2, 3)), np.zeros(2, dtype=int))
    with pytest.raises(ConfigError, match=r"solver\.ridge"):
        next(solver(operator, np.ones((2, 1)), ridge=0.0))
