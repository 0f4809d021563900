"""Laws of the stopping rules: known picks on histories in closed form, and nothing but the history."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import fields, replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from pylops import MatrixMult

from stillground.progress import finish
from stillground.protocols import History, Pick, Rule, RuleOptions
from stillground.solve import Run, iterate
from stillground.solve.cgls import cgls
from stillground.solve.lsqr import lsqr
from stillground.stopping.discrepancy import discrepancy
from stillground.stopping.gcv import gcv

DEFAULT = RuleOptions()
rules = pytest.mark.parametrize("rule", [discrepancy, gcv])
laws = settings(derandomize=True, deadline=None, max_examples=100)


def history(
    norms: np.ndarray, steps: np.ndarray, dof: np.ndarray | None = None, n_data: int = 100
) -> History:
    sizes = np.arange(float(norms.size))
    return History(n_data, norms, steps, sizes, np.sign(sizes), degrees_of_freedom=dof)


def collinear(norms: np.ndarray) -> History:
    """Residuals that shrink along one direction: norms are linear between iterations."""
    return history(norms, np.abs(np.diff(norms, prepend=norms[:1])))


def orthogonal(norms: np.ndarray) -> History:
    """Every residual is orthogonal to the step that led to it, as in CGLS and LSQR."""
    return history(norms, np.sqrt(-np.diff(norms**2, prepend=norms[:1] ** 2)))


def scored(curve: np.ndarray, dof: np.ndarray) -> History:
    """A history whose score of generalised cross-validation is ``curve``."""
    norms = np.sqrt(100 * curve) * (1 - dof / 100)
    return history(norms, np.zeros_like(norms), dof)


def solve(rng: np.random.Generator, solver: Callable = lsqr, scale: float = 1.0) -> Run:
    """A decaying spectrum, a signal of some ten times the noise, errors stated 1/scale of the truth."""
    n = 120
    left, right = (np.linalg.qr(rng.normal(size=(n, n)))[0] for _ in range(2))
    values = 30 / np.arange(1, n + 1.0) ** 1.5
    b = left @ (values * rng.normal(size=n)) + rng.normal(size=n)
    operator = MatrixMult(scale * left @ np.diag(values) @ right.T)
    (run,) = finish(iterate(solver, operator, scale * b[:, None], 30))
    return run


class TestDiscrepancy:
    @pytest.mark.parametrize(
        ("tau", "place"), [(1.0, 4.0), (1.1, 3.6), (1.75, 1.0), (1.99, 0.04), (0.5, 6.0)]
    )
    def test_the_pick_is_linear_between_collinear_residuals(self, tau: float, place: float) -> None:
        pick = discrepancy(collinear(20 - 2.5 * np.arange(8)), RuleOptions(tau=tau))
        assert pick.iteration == pytest.approx(place, abs=1e-12)

    @laws
    @given(tau=st.floats(0.2, 1.9))
    def test_the_pick_is_a_root_between_orthogonal_steps(self, tau: float) -> None:
        """With r' orthogonal to r - r', |r + t (r' - r)|^2 = |r'|^2 + (1 - t)^2 (|r|^2 - |r'|^2)."""
        norms = 20 * 0.7 ** np.arange(15)
        k = int(np.flatnonzero(norms <= 10 * tau)[0])
        t = 1 - np.sqrt(((10 * tau) ** 2 - norms[k] ** 2) / (norms[k - 1] ** 2 - norms[k] ** 2))
        pick = discrepancy(orthogonal(norms), RuleOptions(tau=tau))
        assert pick.iteration == pytest.approx(k - 1 + t, abs=1e-7)

    @pytest.mark.parametrize("solver", [cgls, lsqr])
    @pytest.mark.parametrize("tau", [0.9, 1.0, 1.3])
    def test_the_residual_at_the_pick_meets_the_target(self, solver: Callable, tau: float) -> None:
        run = solve(np.random.default_rng(4), solver)
        pick = discrepancy(run.history, RuleOptions(tau=tau)).iteration
        assert pick is not None
        assert pick % 1 > 0.01
        assert np.mean(run.residual(pick) ** 2) == pytest.approx(tau**2, rel=1e-10)
        misfit = run.columns[:, 0] - run.operator @ run.solution(pick)
        assert np.mean(misfit**2) == pytest.approx(tau**2, rel=1e-8)

    def test_the_first_crossing_counts(self) -> None:
        norms = np.array([20.0, 12.0, 8.0, 11.0, 7.0])
        assert discrepancy(collinear(norms), DEFAULT).iteration == pytest.approx(1.5)

    def test_never_reached_is_an_outcome_with_advice(self) -> None:
        pick = discrepancy(collinear(np.array([20.0, 15.0, 12.0])), DEFAULT)
        assert pick.iteration is None
        assert not pick.firm
        assert "never reached: the misfit is 1.44 after 2 iterations, the target 1" in pick.reason
        assert "solver.iterations" in pick.reason

    @pytest.mark.parametrize("first", [9.0, 10.0])
    def test_a_background_that_fits_is_picked_at_zero(self, first: float) -> None:
        pick = discrepancy(collinear(np.array([first, 5.0])), DEFAULT)
        assert pick.iteration == 0
        assert not pick.firm
        assert "background alone" in pick.reason

    def test_a_steep_misfit_is_firm_and_a_flat_one_is_not(self) -> None:
        steep = discrepancy(collinear(20 - 2.5 * np.arange(8)), DEFAULT)
        assert steep.firm
        assert "stop between 3.8 and 4.2" in steep.reason
        flat = discrepancy(collinear(np.array([20.0, 10.4, 10.2, 10.0, 9.8, 9.6, 9.4])), DEFAULT)
        assert flat.iteration == pytest.approx(3.0)
        assert not flat.firm
        assert "5 % larger would stop at 1.0, 5 % smaller at 5.4" in flat.reason
        ending = discrepancy(collinear(np.array([20.0, 11.0, 9.9])), DEFAULT)
        assert not ending.firm
        assert "5 % smaller never" in ending.reason

    def test_a_pick_inside_a_prefix_does_not_change(self) -> None:
        whole = solve(np.random.default_rng(4)).history
        pick = discrepancy(whole, DEFAULT).iteration
        assert pick is not None
        assert 1 < pick < 20
        for last in range(whole.last + 1):
            expected = pick if last >= pick else None
            assert discrepancy(whole.upto(last), DEFAULT).iteration == expected


class TestGcv:
    def test_the_curve_is_the_misfit_over_what_is_left_of_freedom(self) -> None:
        """Outside source: Golub, Heath & Wahba (1979), from memory."""
        found = history(np.array([20.0, 10.0]), np.zeros(2), np.array([0.0, 60.0])).gcv()
        assert found == pytest.approx([4.0, 1.0 / 0.4**2])

    @laws
    @given(place=st.floats(1.0, 17.0), bend=st.floats(0.01, 10))
    def test_the_minimum_of_a_parabola_is_met_between_iterations(self, place: float, bend: float) -> None:
        k = np.arange(20.0)
        pick = gcv(scored(1 + bend * (k - place) ** 2, 2 * k), DEFAULT)
        assert pick.iteration == pytest.approx(place, abs=1e-6)

    @pytest.mark.parametrize("factor", [0.5, 2.0, 10.0])
    def test_misstated_errors_do_not_move_the_pick(self, factor: float) -> None:
        k = np.arange(20.0)
        right = scored(1 + 0.1 * (k - 6.3) ** 2, 2 * k)
        wrong = replace(right, residual_norm=factor * right.residual_norm)
        assert gcv(wrong, DEFAULT).iteration == pytest.approx(gcv(right, DEFAULT).iteration, rel=1e-12)
        assert gcv(wrong, DEFAULT).firm == gcv(right, DEFAULT).firm

    @pytest.mark.parametrize("scale", [0.5, 2.0])
    def test_misstated_errors_hardly_move_the_pick_of_a_run(self, scale: float) -> None:
        """The disturbance has the stated size, so that degrees of freedom may move a little."""
        right = gcv(solve(np.random.default_rng(4)).history, DEFAULT).iteration
        wrong = gcv(solve(np.random.default_rng(4), scale=scale).history, DEFAULT).iteration
        assert right is not None
        assert wrong is not None
        assert abs(wrong - right) < 1.5
        target = discrepancy(solve(np.random.default_rng(4), scale=scale).history, DEFAULT).iteration
        assert target is None or abs(target - right) > 1.5

    @pytest.mark.parametrize("used", [100.0 - 1e-12, 100.0, 120.0])
    def test_where_all_freedom_is_used_up_there_is_no_pick(self, used: float) -> None:
        """Exact fits of few data: misfit and rest of freedom are rounding, their ratio is anything."""
        dof = np.array([0.0, 40.0, 80.0, used, used])
        pick = gcv(history(np.array([20.0, 8.0, 4.0, 1e-13, 1e-13]), np.zeros(5), dof), DEFAULT)
        assert pick.iteration == pytest.approx(1.0)

    def test_without_degrees_of_freedom_it_does_not_apply(self) -> None:
        pick = gcv(collinear(np.array([20.0, 10.0])), DEFAULT)
        assert pick == Pick.does_not_apply("this run has no degrees of freedom")

    def test_a_curve_that_still_falls_asks_for_more_iterations(self) -> None:
        k = np.arange(6.0)
        pick = gcv(scored(2 - 0.1 * k, 2 * k), DEFAULT)
        assert pick.iteration is None
        assert not pick.firm
        assert "raise solver.iterations" in pick.reason

    @pytest.mark.parametrize("length", [1, 6])
    def test_a_background_that_predicts_best_is_picked_at_zero(self, length: int) -> None:
        k = np.arange(float(length))
        pick = gcv(scored(1 + 0.1 * k, 2 * k), DEFAULT)
        assert pick.iteration == 0
        assert not pick.firm
        assert "background" in pick.reason

    def test_a_clear_minimum_is_firm_and_a_flat_one_is_not(self) -> None:
        k = np.arange(20.0)
        clear = gcv(scored(1 + 0.1 * (k - 6) ** 2, 2 * k), DEFAULT)
        assert clear.firm
        assert "from iteration 6 to 6" in clear.reason
        wide = gcv(scored(1 + 4e-3 * (k - 6) ** 2, 2 * k), DEFAULT)
        assert wide.firm
        assert "from iteration 5 to 7" in wide.reason
        flat = gcv(scored(1 + 1e-3 * (k - 6) ** 2, 2 * k), DEFAULT)
        assert not flat.firm
        assert "from iteration 3 to 9" in flat.reason
        ending = gcv(scored(1 + 2e-3 * (k[:8] - 6) ** 2, 2 * k[:8]), DEFAULT)
        assert not ending.firm


@rules
def test_rules_are_pure(rule: Rule) -> None:
    """The same history gives the same pick, and is left as it was."""
    seen = solve(np.random.default_rng(4)).history
    columns = [field.name for field in fields(seen) if isinstance(getattr(seen, field.name), np.ndarray)]
    before = {name: getattr(seen, name).copy() for name in columns}
    first = rule(seen, DEFAULT)
    assert first.iteration is not None
    rule(solve(np.random.default_rng(9)).history, RuleOptions(tau=2.0))
    assert rule(seen, DEFAULT) == first
    assert rule(History(seen.n_data, **before), DEFAULT) == first
    for name, values in before.items():
        assert np.array_equal(getattr(seen, name), values)


@rules
def test_picks_lie_within_the_history(rule: Rule) -> None:
    whole = solve(np.random.default_rng(4)).history
    for last in range(whole.last + 1):
        pick = rule(whole.upto(last), DEFAULT).iteration
        assert pick is None or 0 <= pick <= last
