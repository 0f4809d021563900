"""Laws of refinement: every verdict for its reason, and answers that do not know the grid."""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from dataclasses import replace
from functools import partial
from typing import TypeVar

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose
from pylops import LinearOperator, MatrixMult

from stillground.grid import Grid, ladder, prolong
from stillground.ground import Blob, Ground
from stillground.operators.prior_root import PriorRoot
from stillground.operators.straight_rays import StraightRays
from stillground.physics.straight_ray import StraightRay
from stillground.progress import finish
from stillground.protocols import GridIndex, History, Iterate, Measurement, Pick, RuleOptions, Verdict
from stillground.reconstruct import Method, reconstruct
from stillground.refinement import Climb, climb, compare, judge, rough_limit
from stillground.refinement.jitter import jitter
from stillground.solve import Run, iterate
from stillground.solve.lsqr import lsqr
from stillground.standard_form import standard_form
from stillground.stopping.discrepancy import discrepancy
from stillground.stopping.gcv import gcv

RULES = {"gcv": gcv, "discrepancy": discrepancy}
T = TypeVar("T")
laws = settings(derandomize=True, deadline=None, max_examples=300)


class TestVerdict:
    def test_shrinking_changes_settle_with_their_order(self) -> None:
        """Outside source: Richardson (1911), the geometric series of changes to come, from memory."""
        verdict = judge((0.08, 0.02, 0.005), 0.001, 0.02)
        assert verdict.word == "settled"
        assert verdict.order == pytest.approx(2.0)
        assert verdict.remaining == pytest.approx(0.005 / 4 + 0.005 / 16 + 0.005 / 64, rel=0.02)
        assert "order 2.0" in verdict.reason

    def test_the_order_of_the_worked_example_of_grid_convergence(self) -> None:
        """Outside source: the tutorial of the NPARC Alliance on spatial convergence, from memory: pressures
        0.97050, 0.96854, 0.96178 with halved spacing have order 1.786 and come to 0.97130."""
        verdict = judge((0.96854 - 0.96178, 0.97050 - 0.96854), 0.0, 0.01)
        assert verdict.order == pytest.approx(1.786, abs=1e-3)
        assert verdict.remaining == pytest.approx(0.97130 - 0.97050, abs=1e-5)

    @pytest.mark.parametrize("before", [0.5, 0.0019, 0.0015, 0.001, 0.0])
    def test_changes_at_the_floor_settle_at_any_rate(self, before: float) -> None:
        verdict = judge((0.04, before, 0.0015), 0.0, 0.02)
        assert verdict.word == "settled"
        assert "at the floor" in verdict.reason
        assert verdict.remaining is not None
        assert verdict.remaining <= 0.0015

    def test_no_change_at_all_settles(self) -> None:
        verdict = judge((0.04, 0.0), 0.0, 0.02)
        assert (verdict.word, verdict.order, verdict.remaining) == ("settled", None, 0.0)
        assert judge((0.0, 0.0, 0.0), 0.0, 0.02).word == "settled"

    @pytest.mark.parametrize("change", [(0.1, 0.11, 0.12), (0.3, 0.11, 0.1), (0.0, 0.05), (0.021, 0.021)])
    def test_large_changes_that_do_not_shrink_drift(self, change: Sequence[float]) -> None:
        verdict = judge(change, 0.0, 0.02)
        assert verdict.word == "drifting"
        assert "depends on the grid" in verdict.reason

    @pytest.mark.parametrize("change", [(), (0.001,)])
    def test_fewer_than_three_rungs_cannot_tell(self, change: Sequence[float]) -> None:
        verdict = judge(change, None, 0.02)
        assert (verdict.word, verdict.order, verdict.remaining) == ("undecided", None, None)
        assert "at least 3" in verdict.reason
        assert "refinement.levels" in verdict.reason

    @pytest.mark.parametrize(
        ("change", "drift", "reason"),
        [
            ((0.08, 0.04), 0.0, "further refinement would still change the picture by about 4 %"),
            ((0.0075, 0.005), 0.0, "the changes shrink slowly (order 0.58)"),
            ((0.005, 0.006), 0.0, "the last change of 0.6 % is not smaller than the one before"),
            ((0.0, 0.006), 0.0, "the last change of 0.6 % is not smaller than the one before"),
            ((0.08, 0.02, 0.005), 0.03, "the stop itself moves the picture by 3 % from rung to rung"),
            ((0.08, 0.02, 0.005), None, "the chosen rule found no pick on one of the two finest rungs"),
            ((0.04, 0.001), 0.03, "the stop itself moves the picture by 3 % from rung to rung"),
        ],
    )
    def test_anything_else_is_undecided_for_one_reason(
        self, change: Sequence[float], drift: float | None, reason: str
    ) -> None:
        verdict = judge(change, drift, 0.02)
        assert verdict.word == "undecided"
        assert verdict.reason == reason

    def test_several_reasons_are_all_told(self) -> None:
        reason = judge((0.035, 0.025), None, 0.02).reason
        assert reason.count("; ") == 2
        for part in ("further refinement", "shrink slowly", "no pick"):
            assert part in reason

    @laws
    @given(
        change=st.lists(st.floats(0, 1e3, allow_subnormal=False), max_size=5),
        drift=st.none() | st.floats(0, 1e3),
        tolerance=st.floats(1e-6, 0.5),
    )
    def test_settled_means_within_the_tolerance(
        self, change: list[float], drift: float | None, tolerance: float
    ) -> None:
        verdict = judge(change, drift, tolerance)
        assert verdict.order is None or not math.isnan(verdict.order)
        assert verdict.remaining is None or verdict.remaining >= 0
        if verdict.word == "settled":
            assert drift is not None
            assert drift <= tolerance
            assert verdict.remaining is not None
            assert verdict.remaining <= tolerance
        if verdict.word == "drifting":
            assert change[-1] > tolerance

    @pytest.mark.parametrize(
        "change",
        [
            (math.nan, 0.01),
            (0.01, math.nan),
            (math.inf, math.inf),
            (1e-2, math.nextafter(1e-2, 0)),
            (1.0, 5e-324),
        ],
    )
    def test_the_order_is_never_nan(self, change: Sequence[float]) -> None:
        verdict = judge(change, 0.0, 0.02)
        assert verdict.order is None or not math.isnan(verdict.order)
        assert (verdict.word == "settled") == (change[-1] == 5e-324)

    def test_a_tighter_tolerance_never_settles_more(self) -> None:
        words = [judge((0.08, 0.02, 0.005), 0.001, t).word for t in (0.1, 0.01, 0.002, 0.0015, 0.0009)]
        assert words == ["settled", "settled", "settled", "undecided", "undecided"]

    def test_one_small_change_does_not_promise_more_than_the_grid_can(self) -> None:
        """80 times less at once is chance: what remains is reckoned at the order that theory gives."""
        change = (0.4, 0.32, 0.004)
        assert judge(change, 0.0, 0.02).remaining == pytest.approx(0.004 / 3)
        assert judge(change, 0.0, 0.02, expected=1.0).remaining == pytest.approx(0.004)

    def test_a_dip_between_larger_changes_tells_no_order(self) -> None:
        verdict = judge((0.08, 0.001, 0.03), 0.0, 0.02, expected=2.0)
        assert (verdict.word, verdict.order, verdict.remaining) == ("undecided", None, None)
        assert "too small beside the others" in verdict.reason
        assert judge((0.03, 0.001, 0.08), 0.0, 0.02).word == "drifting", "growth is no dip"

    def test_changes_within_rounding_settle_without_an_order(self) -> None:
        verdict = judge((0.04, 4e-3, 8e-3), 0.0, 0.02, expected=2.0, jitter=1e-3)
        assert (verdict.word, verdict.order, verdict.remaining) == ("settled", None, 8e-3)
        assert "at the floor: rounding in the iteration alone makes 0.1 %" in verdict.reason
        assert judge((4e-3, 4e-3, 8e-3), 0.0, 0.02, expected=2.0, jitter=1e-4).order == -1.0

    def test_rounding_above_the_tolerance_is_told_and_settles_nothing(self) -> None:
        verdict = judge((0.3, 0.1, 0.12), 0.0, 0.02, jitter=0.05)
        assert (verdict.word, verdict.order) == ("undecided", None)
        assert "rounding in the iteration alone moves the picture by 5 %" in verdict.reason

    def test_a_change_before_within_rounding_tells_no_rate(self) -> None:
        verdict = judge((0.04, 1e-3, 0.03), 0.0, 0.02, jitter=2e-4)
        assert (verdict.word, verdict.order) == ("undecided", None)

    def test_a_prior_without_a_limit_never_settles_and_says_why(self) -> None:
        rough = rough_limit(0.0, -0.5)
        for change in ((0.08, 0.02, 0.005), (0.08, 0.02, 1e-6), (0.1, 0.1)):
            verdict = judge(change, 0.0, 0.02, expected=0.0, rough=rough)
            assert verdict.word == ("drifting" if change[-1] > 0.02 else "undecided")
            assert verdict.remaining is None
            assert "no limit as the grid is refined" in verdict.reason

    @pytest.mark.parametrize("ratio", [1.05, 1.4, 1.5])
    def test_a_slow_order_that_is_expected_is_no_drift(self, ratio: float) -> None:
        change = (0.1 * ratio**2, 0.1 * ratio, 0.1)
        slow = judge(change, 0.0, 0.02, expected=0.5, rough=rough_limit(0.0, 0.5))
        assert slow.word == "undecided"
        assert "staircase" in slow.reason
        assert (judge(change, 0.0, 0.02, expected=2.0).word == "drifting") == (ratio < 1.2)
        assert judge(change[::-1], 0.0, 0.02, expected=0.5).word == "drifting", "growth is drift at any order"


class TestNotes:
    """Outside source of the bound: the reverse triangle inequality, norms move no farther than pictures."""

    fine = GridIndex(1e-3, 2.0, 1.0, 1e-3, 1e-3, None)

    def test_what_fits_needs_no_note(self) -> None:
        for order in (1.51, 2.0, 3.0):
            assert compare(Verdict("settled", "", order, 2e-3, 2.0), self.fine, 0.02) == ()
        assert compare(Verdict("settled", "", 0.3, 1e-3, 2.0), self.fine, 0.02) == (), "at the floor"
        untold = GridIndex(None, None, None, None, None, "it oscillates")
        assert compare(Verdict("undecided", "", None, None, None), untold, 0.02) == ()

    def test_an_order_half_an_order_short_is_told_with_usual_causes(self) -> None:
        (note,) = compare(Verdict("settled", "", 1.4, 5e-3, 2.0), self.fine, 0.02)
        assert "order 1.4 where theory expects 2;" in note
        assert "correlation lengths" in note
        assert compare(Verdict("settled", "", 1.4, 5e-3, 1.5), self.fine, 0.02) == ()

    @pytest.mark.parametrize(
        ("verdict", "index", "words"),
        [
            (Verdict("settled", "", 2.0, 1e-3, 2.0), 2e-3, "the cross-check disagrees"),
            (Verdict("settled", "", 2.0, 0.019, 2.0), 0.021, "above the tolerance of 2 %"),
            (Verdict("drifting", "", 0.1, None, None), 1e-3, "alone would pass"),
        ],
    )
    def test_a_cross_check_that_does_not_fit_is_told(
        self, verdict: Verdict, index: float, words: str
    ) -> None:
        (note,) = compare(verdict, replace(self.fine, index=index), 0.02)
        assert words in note

    def test_an_order_beyond_the_grids_own_is_chance(self) -> None:
        (note,) = compare(Verdict("settled", "", 2.0, 2e-3, 2.0), replace(self.fine, order=4.3), 0.02)
        assert "order of 4.3 is beyond the 2" in note


class TestIntegration:
    """The integration operator on an interval by two quadratures (common practice, no source)."""

    n = 512

    def matrix(self, weights: np.ndarray) -> np.ndarray:
        step = np.tril(np.ones((self.n + 1, self.n + 1))) - 0.5 * np.eye(self.n + 1)
        return step * weights

    def quadratures(self) -> tuple[np.ndarray, np.ndarray]:
        trapezoid = np.full(self.n + 1, 1 / self.n)
        trapezoid[[0, -1]] /= 2
        simpson = np.where(np.arange(self.n + 1) % 2, 4.0, 2.0) / (3 * self.n)
        simpson[[0, -1]] /= 2
        return trapezoid, simpson

    def answers(self, smoothness: float | None) -> list[np.ndarray]:
        """By the discrepancy rule, in standard form or (None) plainly in the nodal values."""
        grid = Grid((0.0,), (1 / self.n,), (self.n + 1,))
        data = (1 - np.cos(4 * grid.axes[0])) / 4
        sigma = 0.01 * data.max()
        data += np.random.default_rng(5).normal(0, sigma, self.n + 1)
        found = []
        for weights in self.quadratures():
            operator = MatrixMult(self.matrix(weights))
            if smoothness is None:
                (run,) = finish(iterate(lsqr, MatrixMult(operator.A / sigma), data[:, None] / sigma, 20))
                found.append(run.solution(self.stop(run)))
            else:
                measurement = Measurement(operator, data, np.full(self.n + 1, sigma))
                standard = standard_form(
                    measurement, PriorRoot(grid, (0.3,), smoothness), np.zeros(self.n + 1)
                )
                (run,) = finish(iterate(lsqr, standard.operator, standard.b[:, None], 20))
                found.append(standard.ground(run.solution(self.stop(run))))
        return found

    @staticmethod
    def stop(run: Run) -> float:
        pick = discrepancy(run.history, RuleOptions()).iteration
        assert pick is not None
        return pick

    @staticmethod
    def teeth(values: np.ndarray) -> float:
        """Share of a function that changes sign from node to node."""
        inner = 0.5 * values[1:-1] - 0.25 * (values[:-2] + values[2:])
        return float(np.linalg.norm(inner) / np.linalg.norm(values))

    @pytest.mark.parametrize("smoothness", [1.0, 2.0])
    def test_in_standard_form_both_quadratures_give_the_same_answer(self, smoothness: float) -> None:
        trapezoid, simpson = self.answers(smoothness)
        assert np.linalg.norm(trapezoid - simpson) <= 0.03 * np.linalg.norm(trapezoid)
        assert self.teeth(trapezoid) < 0.01
        assert self.teeth(simpson) < 0.01

    def test_plainly_the_better_quadrature_gives_a_sawtooth(self) -> None:
        trapezoid, simpson = self.answers(None)
        assert self.teeth(trapezoid) < 0.01
        assert self.teeth(simpson) > 0.25
        ratio = self.quadratures()[1] / self.quadratures()[0]
        # Node by node the two differ as their weights do.
        assert np.linalg.norm(simpson - ratio * trapezoid) < 0.15 * np.linalg.norm(simpson)
        assert np.linalg.norm(simpson - trapezoid) > 0.25 * np.linalg.norm(simpson)


SLOWNESS = 1 / 1800
TWIN = Ground(
    SLOWNESS,
    (
        Blob(0.15 * SLOWNESS, (6.0, -8.0), (2.5, 2.0)),
        Blob(-0.12 * SLOWNESS, (12.0, -17.0), (3.0, 2.5)),
        Blob(0.06 * SLOWNESS, (9.0, -13.0), (6.0, 2.0)),
    ),
)


def survey(grid: Grid) -> Measurement:
    """Crosshole times over ``TWIN`` in closed form, 0.05 ms of noise: no grid had a part in them."""
    depths = np.linspace(-25, -1, 20)
    starts = np.column_stack([np.zeros(400), np.repeat(depths, 20)])
    ends = np.column_stack([np.full(400, 18.0), np.tile(depths, 20)])
    errors = np.full(400, 5e-5)
    times = TWIN.line_integrals(starts, ends) + errors * np.random.default_rng(1).normal(size=400)
    return Measurement(StraightRays(grid, starts, ends), times, errors)


def climbed(smoothness: float, choose: str, spacing: float, levels: int = 4) -> Climb:
    # The coarsest rung has at least two nodes in a correlation length of 4 m.
    grids = ladder((-2.0, -27.0), (20.0, 1.0), (spacing, spacing), levels)
    method = Method((4.0, 4.0), smoothness, lsqr, 25, RULES, choose)
    return finish(climb(survey, grids, method, 0.02, StraightRay.regularity))


@pytest.fixture(scope="module", params=list(RULES))
def smooth(request: pytest.FixtureRequest) -> Climb:
    return climbed(2.0, request.param, 0.125)


class TestCrosshole:
    def test_a_smooth_prior_settles_at_second_order(self, smooth: Climb) -> None:
        """Outside source: the error of bilinear interpolation is of second order."""
        ladder = smooth.ladder
        assert ladder.verdict.word == "settled", ladder.verdict.reason
        orders = -np.diff(np.log2(ladder.change))
        assert_allclose(orders, 2.0, atol=0.15)
        assert ladder.verdict.order == pytest.approx(orders[-1])
        assert ladder.change[-1] <= 0.002

    def test_both_rules_come_close_to_the_best_iterate(self, smooth: Climb) -> None:
        """Outside source: the ground itself, in closed form."""
        found, grid = smooth.finest, smooth.finest.grid
        truth = TWIN.values(np.stack(np.meshgrid(*grid.axes, indexing="ij"), -1).reshape(-1, 2))
        truth = truth.reshape(grid.shape)
        errors = [grid.norm(found.model(k) - truth) for k in range(found.run.history.last + 1)]
        assert min(errors) < 0.6 * errors[0]
        for rule in RULES:
            assert grid.norm(found.model(found.stop(rule)) - truth) <= 1.05 * min(errors)

    @pytest.mark.parametrize("choose", list(RULES))
    def test_a_white_prior_does_not_settle(self, choose: str) -> None:
        """A line integral is no bounded functional on L2 of the plane: there is no limit."""
        ladder = climbed(0.0, choose, 0.25).ladder
        assert ladder.verdict.word != "settled"
        assert ladder.change[-1] > 0.1
        assert ladder.verdict.expected == 0
        assert "no limit as the grid is refined" in ladder.verdict.reason

    def test_the_ladder_knows_the_order_that_it_should_have(self, smooth: Climb) -> None:
        verdict, index = smooth.ladder.verdict, smooth.ladder.index
        assert verdict.expected == 2.0
        assert smooth.ladder.notes == ()
        assert index.order == pytest.approx(2.0, abs=0.2)
        assert index.extrapolated == pytest.approx(smooth.anomaly, rel=0.01)
        assert verdict.remaining is not None
        assert index.index is not None
        assert index.index <= 1.25**2 * verdict.remaining

    def test_rounding_is_far_below_the_changes_where_the_iteration_is_orthogonal(self, smooth: Climb) -> None:
        assert smooth.ladder.jitter is not None
        assert 0 < smooth.ladder.jitter < 1e-10

    def test_rounding_is_measured_by_what_the_iteration_makes_of_the_last_bit(self) -> None:
        """A made-up method that enlarges every departure from the data by 1e9: their last bit is 2.2e-16."""
        seen: list[np.ndarray] = []

        def enlarging(operator: LinearOperator, b: np.ndarray) -> Iterator[Iterate]:
            seen.append(b)
            first = next(each for each in seen if each.shape[0] == b.shape[0])[:, :1]
            for index in range(3):
                dual = 1e-4 * index * (b + 1e9 * (b - first))
                yield Iterate(index, operator.rmatmat(dual), b / (1 + index))

        def second(history: History, options: RuleOptions) -> Pick:
            return Pick(1.5, True, "made up")

        grid = Grid((-2.0, -27.0), (1.0, 1.0), (23, 29))
        method = Method((4.0, 4.0), 2.0, enlarging, 2, {"second": second}, "second")
        found = finish(reconstruct(survey(grid), grid, method))
        moved = finish(jitter(found, 1.5))
        anomaly = found.model(2.0).reshape(-1) - found.standard.background
        ratio = np.linalg.norm(moved) / np.linalg.norm(anomaly)
        # Signs at random cancel in part where each node sums over many data.
        assert 1e-9 < ratio < 1e9 * np.finfo(float).eps

    def test_an_iteration_that_rounding_disturbs_claims_no_order(self) -> None:
        """Plain LSQR loses its orthogonality where singular values fall fast (Paige & Saunders 1982)."""

        def late(history: History, options: RuleOptions) -> Pick:
            return Pick(60.0, True, "made up")

        grids = ladder((-2.0, -27.0), (20.0, 1.0), (0.5, 0.5), 3)
        plain = partial(lsqr, reorthogonal=False)
        found = {}
        for name, solver in (("plain", plain), ("kept", lsqr)):
            method = Method((8.0, 8.0), 4.0, solver, 60, {"late": late}, "late")
            found[name] = finish(climb(survey, grids, method, 0.02, -0.5)).ladder
        lost, kept = found["plain"].jitter, found["kept"].jitter
        assert lost is not None
        assert kept is not None
        assert lost > 1e-3 > 1e-5 > kept
        assert found["plain"].verdict.order is None
        assert "rounding" in (found["plain"].index.reason or "")
        assert found["kept"].verdict.order is not None


class TestClimb:
    def test_changes_are_those_of_the_answers_at_equal_iteration(self) -> None:
        found = climbed(2.0, "gcv", 0.5, levels=3)
        rungs, fine = found.ladder.rungs, found.finest.grid
        grids = ladder((-2.0, -27.0), (20.0, 1.0), (0.5, 0.5), 3)
        assert [rung.spacing[0] for rung in rungs] == [2.0, 1.0, 0.5]
        assert [rung.n_nodes for rung in rungs] == [grid.n_nodes for grid in grids]
        assert_allclose(rungs[-1].model, found.model)
        assert_allclose(found.model, found.finest.model(found.finest.stop("gcv")))
        spread = fine.norm(found.model - fine.mean(found.model))
        assert found.anomaly == pytest.approx(spread / math.sqrt(math.prod(fine.lengths)))
        for i in range(2):
            moved = rungs[i + 1].model - prolong(rungs[i].model, grids[i], grids[i + 1])
            assert found.ladder.change[i] == pytest.approx(grids[i + 1].norm(moved) / spread)
        before = rungs[-2].iteration
        assert before is not None
        drift = found.finest.model(before) - found.model
        assert found.ladder.pick_drift == pytest.approx(fine.norm(drift) / spread)

    def test_the_local_change_adds_up_to_the_change(self) -> None:
        found = climbed(2.0, "gcv", 0.5, levels=3)
        whole = found.finest.grid.norm(found.mesh_change)
        spread = found.anomaly * math.sqrt(math.prod(found.finest.grid.lengths))
        assert whole / spread == pytest.approx(found.ladder.change[-1], rel=1e-3)

    def test_with_two_rungs_the_local_change_is_that_between_them(self) -> None:
        found = climbed(2.0, "gcv", 0.5, levels=2)
        whole = found.finest.grid.norm(found.mesh_change)
        spread = found.anomaly * math.sqrt(math.prod(found.finest.grid.lengths))
        assert whole / spread == pytest.approx(found.ladder.change[0], rel=1e-3)
        assert found.ladder.index.reason == "2 grids, and it takes three"
        assert found.ladder.jitter is None

    def test_broken_off_on_the_last_rung_the_local_change_is_that_of_the_rungs_done(self) -> None:
        grids = ladder((-2.0, -27.0), (20.0, 1.0), (0.5, 0.5), 3)
        method = Method((4.0, 4.0), 2.0, lsqr, 15, RULES, "gcv")
        work = climb(survey, grids, method, 0.02)
        while "rung 3" not in next(work).stage:
            pass
        with pytest.raises(StopIteration) as end:
            work.throw(KeyboardInterrupt)
        found: Climb = end.value.value
        assert found.interrupted
        assert found.mesh_change.shape == grids[1].shape
        spread = found.anomaly * math.sqrt(math.prod(grids[1].lengths))
        assert grids[1].norm(found.mesh_change) / spread == pytest.approx(found.ladder.change[0], rel=1e-3)

    def test_broken_off_in_the_check_of_rounding_the_ladder_stands(self) -> None:
        grids = ladder((-2.0, -27.0), (20.0, 1.0), (0.5, 0.5), 3)
        method = Method((4.0, 4.0), 2.0, lsqr, 15, RULES, "gcv")
        work = climb(survey, grids, method, 0.02)
        while "rounding" not in next(work).stage:
            pass
        with pytest.raises(StopIteration) as end:
            work.throw(KeyboardInterrupt)
        found: Climb = end.value.value
        assert found.interrupted
        assert (len(found.rungs), found.ladder.jitter) == (3, None)

    def test_a_single_rung_has_no_change(self) -> None:
        found = climbed(2.0, "gcv", 0.5, levels=1)
        assert np.all(np.isnan(found.mesh_change))
        assert found.ladder.change == ()
        assert found.ladder.pick_drift is None
        assert found.ladder.verdict.word == "undecided"

    @pytest.mark.parametrize("n_found", [0, 1, 2])
    def test_without_a_pick_on_both_finest_rungs_nothing_settles(self, n_found: int) -> None:
        """Whichever of the two has none, the drift of the pick is untold."""
        calls: list[History] = []

        def rule(history: History, options: RuleOptions) -> Pick:
            calls.append(history)
            lost = {0: (2, 3), 1: (3,), 2: (2,)}[n_found]
            return Pick(None if len(calls) in lost else 8.0, True, "made up")

        grids = ladder((-2.0, -27.0), (20.0, 1.0), (0.5, 0.5), 3)
        method = Method((4.0, 4.0), 2.0, lsqr, 8, {"made up": rule}, "made up")
        found = finish(climb(survey, grids, method, 0.5)).ladder
        assert len(calls) == 3
        assert found.pick_drift is None
        assert found.verdict.word == "undecided"
        assert "no pick" in found.verdict.reason

    def test_progress_names_the_rung(self) -> None:
        grids = ladder((-2.0, -27.0), (20.0, 1.0), (1.0, 1.0), 2)
        seen = list(climb(survey, grids, Method((4.0, 4.0), 2.0, lsqr, 3, RULES, "gcv"), 0.02))
        assert [step.stage for step in seen] == ["rung 1 of 2, 2 m"] * 4 + ["rung 2 of 2, 1 m"] * 4
        assert [(step.done, step.total) for step in seen] == [(k, 3) for k in range(4)] * 2

    def test_answers_do_not_depend_on_units(self) -> None:
        """Milliseconds for seconds: the history and every pick stay, the model comes in ms/m."""

        def thousandfold(grid: Grid) -> Measurement:
            seen = survey(grid)
            return Measurement(seen.operator, 1000 * seen.data, 1000 * seen.errors)

        grids = ladder((-2.0, -27.0), (20.0, 1.0), (0.5, 0.5), 3)
        method = Method((4.0, 4.0), 2.0, lsqr, 15, RULES, "gcv")
        one, other = (finish(climb(assemble, grids, method, 0.02)) for assemble in (survey, thousandfold))
        assert_allclose(other.model, 1000 * one.model, rtol=1e-9)
        for name in ("residual_norm", "solution_norm", "step_norm", "degrees_of_freedom"):
            assert_allclose(
                getattr(other.finest.run.history, name),
                getattr(one.finest.run.history, name),
                rtol=1e-7,
                atol=1e-9,
            )
        assert_allclose(other.ladder.change, one.ladder.change, rtol=1e-6)
        assert other.ladder.verdict.word == one.ladder.verdict.word

    def test_data_without_any_anomaly_settle_on_the_background(self) -> None:
        # The backgrounds of the three rungs differ by rounding.
        slowness = 1 / 1763

        def level(grid: Grid) -> Measurement:
            seen = survey(grid)
            return Measurement(seen.operator, seen.operator @ np.full(grid.n_nodes, slowness), seen.errors)

        grids = ladder((-2.0, -27.0), (20.0, 1.0), (0.5, 0.5), 3)
        method = Method((4.0, 4.0), 2.0, lsqr, 5, RULES, "discrepancy")
        found = finish(climb(level, grids, method, 0.02))
        assert_allclose(found.model, slowness, rtol=1e-9)
        assert not found.mesh_change.any(), "rounding is no change"
