"""The noise part of the error against an ensemble of surveys drawn anew."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from stillground.operators.prior_root import PriorRoot
from stillground.progress import finish
from stillground.reconstruct import prepare, with_delay
from stillground.solve import back, iterate
from stillground.uncertainty import extra_deviations, noise_part
from twins import BACKGROUND, BLOBS, a_method, crosshole_twin, reconstructed

SIGMA = 0.02e-3


def test_the_noise_part_is_the_scatter_of_surveys_drawn_anew() -> None:
    # 300 whole surveys over the same ground: a Monte Carlo of the definition, stopped at one iteration.
    twin = crosshole_twin(14, SIGMA, 0, spacing=1.0)
    found = reconstructed(twin)
    stop = found.stop("gcv")
    told, _ = finish(noise_part(found, stop, members=32, seed=1))

    problem = prepare(twin.measurement, twin.grid, found.method, products=10**6)
    clean = BLOBS.line_integrals(twin.scene.starts, twin.scene.ends)
    predicted = twin.measurement.operator.matvec(problem.standard.background)
    noise = np.random.default_rng(2).standard_normal((clean.size, 300))
    columns = ((clean - predicted) / SIGMA)[:, None] + noise
    runs = finish(iterate(found.method.solver, problem.operator, columns, int(stop) + 1, probes=0))
    grounds = problem.anomaly(back(problem.operator, np.column_stack([run.inside(stop) for run in runs])))
    scatter = np.sqrt(twin.grid.local_mean(grounds.var(axis=1), found.method.correlation))
    assert float(np.sqrt(np.mean((told / scatter - 1) ** 2))) < 0.15


def test_the_noise_part_repeats_to_the_bit_and_grows_with_the_stop() -> None:
    twin = crosshole_twin(10, SIGMA, 0, spacing=1.0)
    found = reconstructed(twin)
    early, late, again = (finish(noise_part(found, k, members=8, seed=1))[0] for k in (3.0, 12.5, 12.5))
    np.testing.assert_array_equal(late, again)
    assert twin.grid.norm(late) > 1.5 * twin.grid.norm(early)


@pytest.mark.parametrize("factor", [0.5, 2.0])
def test_the_noise_part_takes_the_size_of_the_noise_from_the_data(factor: float) -> None:
    twin = crosshole_twin(14, SIGMA, 0, spacing=1.0)
    wrong = replace(twin, measurement=replace(twin.measurement, errors=factor * twin.measurement.errors))
    one, other = (
        finish(noise_part(reconstructed(each, a_method(trust=False)), 8.0, members=16, seed=1))[0]
        for each in (twin, wrong)
    )
    assert twin.grid.norm(one - other) < 0.1 * twin.grid.norm(one)


def test_at_the_background_there_is_no_noise_part() -> None:
    twin = crosshole_twin(10, SIGMA, 0, spacing=1.0)
    np.testing.assert_array_equal(finish(noise_part(reconstructed(twin), 0.0, members=4, seed=1))[0], 0.0)


@pytest.mark.parametrize("background", [None, BACKGROUND])
def test_the_deviation_of_a_delay_is_that_of_the_normal_equations(background: float | None) -> None:
    # Dense beside it: the inverse of (A^T A / noise^2 + prior), the background with no prior where it is
    # fitted (Gauss-Markov; a linear problem's posterior covariance, from memory).
    twin = crosshole_twin(8, SIGMA, 0, spacing=1.0)
    measurement = with_delay(twin.measurement, "s")
    found = reconstructed(replace(twin, measurement=measurement), a_method(background=background))
    operator, noise = found.standard.operator, found.noise
    dense = operator.matmat(np.eye(operator.shape[1])) / noise
    precision = dense.T @ dense + np.eye(dense.shape[1])
    if background is None:
        constant = measurement.operator.matvec(np.ones(twin.grid.n_nodes)) / measurement.errors / noise
        cross = dense.T @ constant
        precision -= np.outer(cross, cross) / (constant @ constant)
    wanted = measurement.extras[0].deviation * np.sqrt(np.linalg.inv(precision)[-1, -1])
    assert extra_deviations(found) == pytest.approx({"delay": wanted}, rel=1e-4)


def test_the_deviation_of_a_delay_covers_delays_found_where_there_are_none() -> None:
    # A Monte Carlo of the definition over grounds of the prior; stopping early adds some scatter.
    twin = crosshole_twin(14, SIGMA, 0)
    random, ratios = np.random.default_rng(1), []
    root = PriorRoot(twin.grid, (3.0, 2.0), 2.0)
    for _ in range(24):
        ground = BACKGROUND * (1 + 0.03 * root.matvec(random.standard_normal(twin.grid.n_nodes)))
        data = twin.measurement.operator.matvec(ground) + SIGMA * random.standard_normal(14 * 14)
        late = replace(twin, measurement=with_delay(replace(twin.measurement, data=data), "s"))
        found = reconstructed(late)
        value = found.standard.extras(found.run.solution(found.stop("gcv")))["delay"][0]
        ratios.append(value / extra_deviations(found)["delay"])
    assert 0.75 < float(np.sqrt(np.mean(np.square(ratios)))) < 1.35


def test_statics_and_grounds_alone_have_no_single_deviation() -> None:
    assert extra_deviations(reconstructed(crosshole_twin(10, SIGMA, 0, spacing=1.0))) == {}
