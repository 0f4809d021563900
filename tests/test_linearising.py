"""Nonlinear measurements, solved by linear ones: a toy of closed form, and small curved rays."""

from __future__ import annotations

from dataclasses import dataclass, replace
from itertools import pairwise
from typing import Literal

import numpy as np
import pytest
from pylops import Diagonal, LinearOperator, MatrixMult

from stillground.grid import Grid
from stillground.operators.curved_rays import TravelTimes
from stillground.operators.straight_rays import StraightRays
from stillground.progress import finish
from stillground.protocols import Array, Measurement, NonlinearMeasurement
from stillground.reconstruct import (
    Linearised,
    Method,
    linearise,
    linearised_at,
    reconstruct,
    reweighted,
    with_delay,
)
from stillground.reconstruct.outliers import HUBER_ENERGY, huber, weighted_errors
from stillground.solve.lsqr import lsqr
from stillground.stopping.discrepancy import discrepancy

RULES = {"discrepancy": discrepancy}


@dataclass(frozen=True, kw_only=True)
class Means(NonlinearMeasurement):
    """``d = W exp(u)``: weighted means of a property over its logarithm."""

    means: Array

    def predict(self, field: Array) -> Array:
        return self.means @ np.exp(field)

    def linearise(self, field: Array) -> tuple[Array, LinearOperator]:
        return self.predict(field), MatrixMult(self.means * np.exp(field))

    def rays(self, field: Array) -> tuple[Array, ...]:
        return ()


LINE = Grid(origin=(0.0,), spacing=(0.1,), shape=(101,))
TOY = Method((1.0,), 2.0, lsqr, 40, RULES, "discrepancy")


def truth(z: Array) -> Array:
    return np.asarray(1.2 * np.sin(z) + 0.1 * z)


def toy(grid: Grid = LINE, *, n_data: int = 120, seed: int = 0, outliers: float = 0.0) -> Means:
    """Gaussian windows 0.3 wide; data by the same windows on a grid eight times finer."""
    middles = np.linspace(0.0, 10.0, n_data)

    def windows(on: Grid) -> Array:
        return np.exp(-0.5 * ((on.axes[0] - middles[:, None]) / 0.3) ** 2) * on.weights()

    fine = LINE.refined().refined().refined()
    random = np.random.default_rng(seed)
    data = windows(fine) @ np.exp(truth(fine.axes[0])) + 0.02 * random.standard_normal(n_data)
    wild = random.permutation(n_data)[: round(outliers * n_data)]
    data[wild] += random.choice([-1.0, 1.0], wild.size) * random.uniform(0.3, 1.0, wild.size)
    return Means(
        data=data,
        errors=np.full(n_data, 0.02),
        groupings={},
        start=np.zeros(grid.n_nodes),
        other_starts={},
        means=windows(grid),
    )


def answered(outcome: Linearised, grid: Grid, method: Method) -> Array:
    """The ground at the discrepancy pick of the last linearisation."""
    found = finish(reconstruct(reweighted(outcome.measurement, outcome.weights), grid, method))
    return found.model(found.stop("discrepancy")).reshape(-1)


def rms(values: Array) -> float:
    return float(np.sqrt(np.mean(np.square(values))))


def test_chi_square_comes_to_one_and_the_last_linearisation_is_left_to_be_judged() -> None:
    measurement = toy()
    outcome = finish(linearise(measurement, LINE, TOY))
    assert outcome.steps.misfits[0] > 100
    assert outcome.steps.reached
    assert outcome.steps.misfits[-1] == pytest.approx(1.0, abs=0.1)
    assert len(outcome.steps.targets) <= 8
    assert rms(outcome.field - truth(LINE.axes[0])) < 0.1 * rms(truth(LINE.axes[0]))
    # The last linearisation touches the measurement where the steps ended, and its history begins at the
    # prior mean: the discrepancy principle finds nearly the same ground on it.
    linear, predicted = linearised_at(measurement, outcome.field)
    assert np.array_equal(outcome.measurement.data, linear.data)
    assert np.mean(((measurement.data - predicted) / measurement.errors) ** 2) == outcome.steps.misfits[-1]
    answer = answered(outcome, LINE, TOY)
    assert rms(answer - outcome.field) < 0.01 * rms(answer)
    residual = (measurement.data - measurement.predict(answer)) / measurement.errors
    assert float(np.mean(residual**2)) == pytest.approx(1.0, abs=0.1)


def test_the_linearisation_touches_the_measurement_and_keeps_the_prior_mean() -> None:
    measurement, field = toy(), 0.3 * truth(LINE.axes[0])
    linear, predicted = linearised_at(measurement, field)
    assert np.allclose(linear.data - linear.operator @ field, measurement.data - predicted)
    assert linear.background is measurement.start
    # Taylor: what the tangent leaves goes down with the square of the step.
    step = 1e-3 * np.cos(LINE.axes[0])
    left = [
        rms(measurement.predict(field + part * step) - predicted - linear.operator @ (part * step))
        for part in (1.0, 0.5)
    ]
    assert left[0] / left[1] == pytest.approx(4.0, rel=0.01)


@dataclass(frozen=True, kw_only=True)
class Straight(Means):
    """``d = W u``."""

    def predict(self, field: Array) -> Array:
        return self.means @ field

    def linearise(self, field: Array) -> tuple[Array, LinearOperator]:
        return self.predict(field), MatrixMult(self.means)


@pytest.mark.parametrize("delay", [False, True])
def test_of_a_linear_measurement_it_is_the_linear_answer(delay: bool) -> None:
    like = toy()
    noise = 0.02 * np.random.default_rng(2).standard_normal(like.data.size)
    data = like.means @ truth(LINE.axes[0]) + noise + (0.1 if delay else 0.0)
    start = np.full(LINE.n_nodes, 0.2)
    measured = Straight(
        data=data, errors=like.errors, groupings={}, start=start, other_starts={}, means=like.means
    )
    linear = Measurement(MatrixMult(like.means), data, like.errors)
    if delay:
        measured, linear = with_delay(measured, "s"), with_delay(linear, "s")
    outcome = finish(linearise(measured, LINE, TOY))
    found = finish(reconstruct(linear, LINE, replace(TOY, background=0.2)))
    # Where nothing bends, every step meets its target exactly and the last linearisation is the measurement.
    assert outcome.steps.misfits[1:] == pytest.approx(outcome.steps.targets, rel=1e-6)
    assert outcome.steps.targets[-1] == 1
    assert rms(answered(outcome, LINE, TOY) - found.model(found.stop("discrepancy")).reshape(-1)) < 1e-9


@pytest.mark.parametrize("outliers", ["auto", "tukey"])
def test_outliers_hardly_move_the_answer(outliers: Literal["auto", "tukey"]) -> None:
    def error(outcome: Linearised) -> float:
        return rms(outcome.field - truth(LINE.axes[0]))

    seeds = range(5)
    clean = [error(finish(linearise(toy(n_data=240, seed=s), LINE, TOY))) for s in seeds]
    wild = [toy(n_data=240, seed=s, outliers=0.1) for s in seeds]
    robust = [finish(linearise(each, LINE, TOY, outliers=outliers)) for each in wild]
    # A tenth of the data less, and the biweight's efficiency of 95 %, cost 8 %; the rest is data beside
    # outliers, which here stand for a stretch of ground almost alone.
    assert np.mean([error(each) for each in robust]) < 1.25 * np.mean(clean)
    assert all(24 <= np.sum(each.weights < 0.5) <= 32 for each in robust)
    plain = [error(finish(linearise(each, LINE, TOY))) for each in wild]
    assert np.mean(plain) > 5 * np.mean(clean)


def test_clean_data_keep_their_weights_unless_always_asked() -> None:
    assert np.all(finish(linearise(toy(), LINE, TOY, outliers="auto")).weights == 1)
    assert not np.all(finish(linearise(toy(), LINE, TOY, outliers="tukey")).weights == 1)


def test_rungs_that_make_the_same_steps_settle() -> None:
    grids = [LINE, LINE.refined(), LINE.refined().refined()]
    led = finish(linearise(toy(grids[1]), grids[1], TOY))
    steps, answers = [], []
    for grid in grids:
        outcome = finish(linearise(toy(grid), grid, TOY, targets=led.steps.targets, weights=led.weights))
        assert outcome.steps.targets == led.steps.targets
        assert len(outcome.steps.misfits) == len(led.steps.targets) + 1
        steps.append(outcome.field)
        answers.append(answered(outcome, grid, TOY))
    for fields in (steps, answers):
        changes = [rms(after[::2] - before) for before, after in pairwise(fields)]
        # Means by the trapezoid rule and a Matern prior of s = 2: second order.
        assert changes[1] < changes[0] / 2
        assert changes[1] < 0.005 * rms(fields[-1])


def test_a_target_that_is_met_already_leaves_the_model_where_it_is() -> None:
    found = finish(linearise(toy(), LINE, TOY, targets=(2000.0, 3000.0)))
    assert found.steps.misfits[2] == found.steps.misfits[1]


def test_outer_steps_keep_bounds() -> None:
    bounded = replace(TOY, bounds=(-0.5, 1.0))
    found = finish(linearise(toy(), LINE, bounded))
    assert found.field.min() >= -0.5
    assert found.field.max() == 1.0


def test_huber_weights_of_normal_residuals_leave_their_mean_square() -> None:
    """E[min(1, c / |z|) z^2] = P(|z| < c) for the standard normal (Huber 1964, the weights of his psi)."""
    z = np.random.default_rng(4).standard_normal(400_000)
    errors = weighted_errors(np.ones_like(z), huber(z), HUBER_ENERGY)
    assert float(np.mean((z / errors) ** 2)) == pytest.approx(1.0, abs=0.01)


def test_steps_home_bring_the_answer_to_fit() -> None:
    """From a start far off, the linearisation where the steps end is another than where its answer is."""
    far = replace(toy(), start=np.full(LINE.n_nodes, -3.0))
    found = finish(linearise(far, LINE, TOY))
    assert found.steps.homing[-1] == min(found.steps.homing)
    own = ((far.data - far.predict(answered(found, LINE, TOY))) / far.errors) ** 2
    assert float(np.mean(own)) == pytest.approx(found.steps.homing[-1], rel=0.02)
    same = finish(linearise(far, LINE, TOY, targets=found.steps.targets, homing=len(found.steps.homing) - 1))
    assert same.steps.homing == found.steps.homing


def test_a_target_out_of_reach_is_told() -> None:
    measurement = toy()
    noise = np.random.default_rng(5).standard_normal(measurement.data.size)
    contradicting = replace(measurement, data=measurement.data + 0.5 * noise)
    outcome = finish(linearise(contradicting, LINE, TOY))
    assert not outcome.steps.reached
    assert "stays at" in outcome.reason
    assert "its target is 1" in outcome.reason
    assert np.all(np.isfinite(outcome.field))


def test_data_that_the_start_explains_need_no_step() -> None:
    measurement = toy()
    explained = replace(measurement, start=truth(LINE.axes[0]))
    outcome = finish(linearise(explained, LINE, TOY))
    assert outcome.steps.reached
    assert outcome.steps.targets == ()
    assert outcome.field is explained.start


@dataclass(frozen=True, kw_only=True)
class Arrivals(NonlinearMeasurement):
    """First arrivals over log slowness."""

    times: TravelTimes

    def predict(self, field: Array) -> Array:
        return self.times.predict(np.exp(field))

    def linearise(self, field: Array) -> tuple[Array, LinearOperator]:
        slowness = np.exp(field)
        derivative = self.times.linearise(slowness, self.errors)
        return derivative.times, derivative @ Diagonal(slowness)

    def rays(self, field: Array) -> tuple[Array, ...]:
        return ()


SECTION = Grid(origin=(0.0, 0.0), spacing=(0.5, 0.5), shape=(31, 51))
SOURCES = np.array([[0.5, z] for z in np.linspace(1.0, 24.0, 12) for _ in range(12)])
RECEIVERS = np.array([[14.5, z] for _ in range(12) for z in np.linspace(1.0, 24.0, 12)])
ROCK = Method((5.0, 5.0), 2.0, lsqr, 60, RULES, "discrepancy")
ERROR = 2e-5


def crosshole(contrast: float, *, outliers: float = 0.0) -> tuple[Arrivals, Array]:
    """Boreholes 14 m apart around a body in 2000 m/s; data from half the spacing. Also the truth."""

    def log_slowness(grid: Grid) -> Array:
        x, z = np.meshgrid(*grid.axes, indexing="ij")
        body = np.exp(-0.5 * (((x - 7) / 2.5) ** 2 + ((z - 13) / 3) ** 2))
        return (np.log(1 / 2000) + contrast * body).reshape(-1)

    random = np.random.default_rng(3)
    fine = SECTION.refined()
    data = TravelTimes(fine, SOURCES, RECEIVERS).predict(np.exp(log_slowness(fine)))
    data += ERROR * random.standard_normal(data.size)
    wild = random.permutation(data.size)[: round(outliers * data.size)]
    data[wild] += random.choice([-1.0, 1.0], wild.size) * random.uniform(3e-4, 1e-3, wild.size)
    measurement = Arrivals(
        data=data,
        errors=np.full(data.size, ERROR),
        groupings={},
        start=np.full(SECTION.n_nodes, np.log(1 / 2000)),
        other_starts={},
        times=TravelTimes(SECTION, SOURCES, RECEIVERS),
    )
    return measurement, log_slowness(SECTION)


def test_curved_rays_find_a_body_and_outliers_do_not_hide_it() -> None:
    clean, body = crosshole(0.3)
    outcome = finish(linearise(clean, SECTION, ROCK))
    assert outcome.steps.reached
    assert len(outcome.steps.targets) <= 8
    before = rms(clean.start - body)
    error = rms(outcome.field - body)
    assert error < 0.5 * before
    wild, _ = crosshole(0.3, outliers=0.1)
    robust = finish(linearise(wild, SECTION, ROCK, outliers="auto"))
    assert rms(robust.field - body) < 1.1 * error
    assert not finish(linearise(wild, SECTION, ROCK)).steps.reached


def test_over_nearly_uniform_ground_curved_rays_give_the_straight_ray_answer() -> None:
    measurement, body = crosshole(-0.01)
    outcome = finish(linearise(measurement, SECTION, ROCK))
    assert outcome.steps.reached
    straight = Measurement(StraightRays(SECTION, SOURCES, RECEIVERS), measurement.data, measurement.errors)
    found = finish(reconstruct(straight, SECTION, replace(ROCK, background=1 / 2000)))
    slowness = found.model(found.stop("discrepancy")).reshape(-1)
    assert rms(2000 * np.exp(outcome.field) - 2000 * slowness) < 0.15 * rms(body - body[0])
