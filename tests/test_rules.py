"""Stopping rules on histories in closed form, whose picks follow by hand."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from stillground import plugins
from stillground.protocols import Array, History, RuleOptions
from stillground.stopping.discrepancy import discrepancy
from stillground.stopping.gcv import gcv
from stillground.stopping.hanke_raus import hanke_raus
from stillground.stopping.l_curve import l_curve
from stillground.stopping.monotone_error import monotone_error
from stillground.stopping.quasi_optimality import quasi_optimality
from stillground.stopping.risk import risk
from stillground.stopping.whiteness import whiteness

STATED = RuleOptions()
K = np.arange(41.0)


def history(residual: Array, n_data: int = 100, **columns: object) -> History:
    """A history of a residual norm; the other columns that all have are of no account."""
    steps = -np.diff(residual, prepend=residual[0])
    plain = {"residual_step": steps, "solution_norm": np.sqrt(K), "step_norm": np.ones_like(K)}
    return History(n_data, residual, **(plain | columns))  # type: ignore[arg-type]


@pytest.mark.parametrize(("noise", "pick"), [(1.0, 19.0), (2.0, 9.0)])
def test_the_risk_is_least_where_fit_and_freedom_weigh_alike(noise: float, pick: float) -> None:
    # chi^2 = 16 / (k + 1), dof = 2 k of 100: 16 / (k + 1) + 0.04 s^2 k is least at (k + 1)^2 = 400 / s^2.
    h = history(np.sqrt(100 * 16 / (K + 1)), degrees_of_freedom=2 * K)
    found = risk(h, RuleOptions(noise=noise))
    assert found.iteration == pytest.approx(pick, abs=0.2)
    assert found.firm


@pytest.mark.parametrize("factor", [1.0, 1.4])
def test_cross_validation_is_least_where_its_formula_is(factor: float) -> None:
    # chi^2 = exp(-k / 20) / (1 - f 2k/100)^2 is least where 0.04 f / (1 - 0.02 f k) = 1/20 (log derivative).
    h = history(10 * np.exp(-K / 40), degrees_of_freedom=2 * K)
    found = gcv(h, RuleOptions(gcv_factor=factor))
    wanted = max((1 - 0.8 * factor) / (0.02 * factor), 0.0)
    assert found.iteration == pytest.approx(wanted, abs=0.1)


def test_cross_validation_does_not_ask_for_the_size_of_the_errors() -> None:
    h = history(10 * np.exp(-K / 40), degrees_of_freedom=2 * K)
    assert gcv(h, RuleOptions(noise=3.0)) == gcv(h, STATED)
    tripled = history(30 * np.exp(-K / 40), degrees_of_freedom=2 * K)
    assert gcv(tripled, STATED).iteration == pytest.approx(gcv(h, STATED).iteration, rel=1e-9)


@pytest.mark.parametrize(("noise", "tau", "pick"), [(1.0, 1.0, 20.0), (1.5, 1.0, 10.0), (1.0, 1.5, 10.0)])
def test_the_discrepancy_target_is_tau_times_the_noise(noise: float, tau: float, pick: float) -> None:
    # |r| = 20 - k / 2, straight down with steps along r, meets tau s sqrt(100).
    found = discrepancy(history(20 - K / 2), RuleOptions(tau=tau, noise=noise))
    assert found.iteration == pytest.approx(pick, abs=1e-9)


def test_whiteness_takes_the_worst_grouping() -> None:
    one, other = 0.5 + 0.1 * np.abs(K - 6), 0.5 + 0.1 * np.abs(K - 12)
    h = history(20 - K / 4, whiteness={"source": one, "receiver": other})
    found = whiteness(h, STATED)
    assert found.iteration == pytest.approx(9.0, abs=0.5), "half way between the two"
    assert found.firm


def test_whiteness_is_weak_where_residuals_never_pass_as_white() -> None:
    h = history(20 - K / 4, whiteness={"source": 1.5 + 0.1 * np.abs(K - 6)})
    found = whiteness(h, STATED)
    assert found.iteration == pytest.approx(6.0, abs=1e-9)
    assert not found.firm
    assert "never pass as white: 1.5" in found.reason


@pytest.mark.parametrize("corner", [7.0, 11.0])
def test_the_corner_of_an_l_is_found(corner: float) -> None:
    # |r| and |x| with t = log(k / corner): symmetric to each other, so the corner lies at t = 0.
    t = K / corner
    with np.errstate(divide="ignore"):
        fall, rise = 1 + np.where(K > 0, t, np.nan) ** -3.0, 1 + t**3
    residual = np.where(K > 0, fall, 1e4)
    found = l_curve(history(residual, solution_norm=np.where(K > 0, rise, 0.0)), STATED)
    assert found.iteration == pytest.approx(corner, rel=0.08)
    assert found.firm


def test_a_straight_l_curve_has_no_firm_corner() -> None:
    h = history(10 / (K + 1), solution_norm=np.where(K > 0, K + 1, 0.0))
    assert not l_curve(h, STATED).firm


def test_quasi_optimality_finds_the_least_step() -> None:
    steps = np.where(K > 0, 50 / np.maximum(K, 1) + K / 2, 0.0)
    found = quasi_optimality(history(20 - K / 4, step_norm=steps), STATED)
    assert found.iteration == pytest.approx(10.0, abs=0.1)
    assert found.firm


def test_quasi_optimality_is_weak_where_steps_still_shrink() -> None:
    found = quasi_optimality(history(20 - K / 4, step_norm=np.where(K > 0, 1 / np.maximum(K, 1), 0)), STATED)
    assert not found.firm
    assert "still falling" in found.reason


@pytest.mark.parametrize(("noise", "pick"), [(1.0, 14.5), (2.0, 4.5)])
def test_monotone_error_stops_where_the_bound_meets_the_noise(noise: float, pick: float) -> None:
    bound = np.where(K > 0, 24.5 - K, np.inf)
    found = monotone_error(history(20 - K / 4, error_bound=bound), RuleOptions(noise=noise))
    assert found.iteration == pytest.approx(pick, abs=1e-12)


def test_monotone_error_takes_no_step_that_is_not_sure() -> None:
    found = monotone_error(history(20 - K / 4, error_bound=np.where(K > 0, 5.0, np.inf)), STATED)
    assert (found.iteration, found.firm) == (0.0, False)


def test_monotone_error_never_reached_picks_nothing() -> None:
    found = monotone_error(history(20 - K / 4, error_bound=np.full(41, 30.0)), STATED)
    assert (found.iteration, found.firm) == (None, False)


def test_hanke_raus_is_least_where_its_product_is() -> None:
    # q(0) = k^2 and |r| = 1 / 12 + 12 / k^2: the product k / 12 + 12 / k is least at 12.
    residual = 1 / 12 + 12 / np.maximum(K, 0.5) ** 2
    found = hanke_raus(history(residual, filter_slope=K**2), STATED)
    assert found.iteration == pytest.approx(12.0, abs=0.1)
    assert found.firm


@pytest.mark.parametrize(
    ("name", "column"),
    [
        ("gcv", "degrees_of_freedom"),
        ("risk", "degrees_of_freedom"),
        ("hanke-raus", "filter_slope"),
        ("monotone-error", "error_bound"),
        ("whiteness", "whiteness"),
    ],
)
def test_a_rule_without_its_column_does_not_apply(name: str, column: str) -> None:
    full = history(
        20 - K / 4,
        degrees_of_freedom=4 * K,
        filter_slope=K**2,
        error_bound=24.5 - K,
        whiteness={"source": 0.5 + 0.1 * np.abs(K - 6)},
    )
    assert plugins.rule(name)(full, STATED).iteration is not None
    missing = replace(full, **{column: {} if column == "whiteness" else None})
    found = plugins.rule(name)(missing, STATED)
    assert found.iteration is None
    assert not found.firm
    assert not found.applies


@pytest.mark.parametrize("name", ["l-curve", "quasi-optimality", "hanke-raus"])
def test_a_rule_of_shapes_does_not_apply_to_one_iteration(name: str) -> None:
    found = plugins.rule(name)(history(20 - K / 4, filter_slope=K**2).upto(1), STATED)
    assert found.iteration is None
    assert not found.applies


@pytest.mark.parametrize("name", ["gcv", "risk", "whiteness", "hanke-raus", "monotone-error",
                                  "quasi-optimality", "discrepancy"])  # fmt: skip
@pytest.mark.parametrize("ended", [False, True])
def test_more_iterations_are_advised_only_where_there_are_any(name: str, ended: bool) -> None:
    h = history(
        20 + 20 * np.exp(-K / 5),
        degrees_of_freedom=1e-5 * K,
        filter_slope=1 + 1e-6 * K,
        error_bound=np.full(41, 30.0),
        step_norm=np.where(K > 0, 1 / np.maximum(K, 1), 0),
        whiteness={"source": 5 - K / 10},
        ended=ended,
    )
    found = plugins.rule(name)(h, STATED)
    assert found.iteration is None
    assert ("the iteration ended by itself" in found.reason) == ended
    assert ("solver.iterations" in found.reason) != ended


@pytest.mark.parametrize("name", ["gcv", "risk", "whiteness", "hanke-raus"])
def test_a_curve_that_still_falls_is_weak(name: str) -> None:
    h = history(
        20 * np.exp(-K / 5),
        degrees_of_freedom=1e-5 * K,
        filter_slope=1 + 0.01 * K,
        whiteness={"source": 5 - K / 10},
    )
    found = plugins.rule(name)(h, STATED)
    assert not found.firm
    assert "still" in found.reason
