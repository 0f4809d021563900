"""The nonlinear chain over grids, on data that march through a described ground on a finer grid than any."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np

from stillground.config import load
from stillground.grid import Grid
from stillground.pipeline.answer import plan_method
from stillground.pipeline.grids import plan_grids
from stillground.pipeline.linear import Linear, linear_ladder
from stillground.pipeline.profiles import read_profiles
from stillground.pipeline.simulate import described_ground
from stillground.progress import finish
from stillground.protocols import Array, Measurement, NonlinearMeasurement
from stillground.refinement import Climb, climb

CONFIG = Path(__file__).parents[2] / "configs" / "osmere-weir-refraction.toml"
COARSE = ("ground.spacing=0.5 m", "refinement.levels=2")


def solved(*overrides: str, wild: float = 0.0) -> tuple[Climb, Linear, Array]:
    """The ladder of the demo line, and the true log slowness on its finest grid."""
    config, _ = load(CONFIG, overrides)
    (profile,) = read_profiles(config)
    random = np.random.default_rng(11)
    times = profile.scene.data.copy()
    spoilt = random.permutation(times.size)[: round(wild * times.size)]
    times[spoilt] += random.choice([-1.0, 1.0], spoilt.size) * random.uniform(4e-3, 15e-3, spoilt.size)
    profile = replace(profile, scene=replace(profile.scene, data=times))
    method = plan_method(config)
    linear = finish(linear_ladder(profile, config, plan_grids(profile, config), method))
    top = finish(climb(linear, linear.grids, method, config.refinement.tolerance, config.kind.regularity))
    assert config.simulate is not None
    ground = described_ground(config.simulate, config.kind.axes)
    nodes = np.stack(np.meshgrid(*top.finest.grid.axes, indexing="ij"), axis=-1).reshape(-1, 2)
    return top, linear, np.log(ground.values(nodes))


def lit(linear: Linear, grid: Grid) -> Array:
    """The half of the nodes with most ray through the answer."""
    measurement = linear.stated(grid)
    assert isinstance(measurement, Measurement)
    length = np.abs(measurement.operator.rmatvec(np.ones(measurement.data.size)))
    length = grid.local_mean(length, (12.0, 4.0)).reshape(-1)
    return length > np.median(length)


def rms(values: Array) -> float:
    return float(np.sqrt(np.mean(np.square(values))))


def test_a_twin_settles_near_the_truth_and_a_white_prior_does_not() -> None:
    top, linear, truth = solved()
    grid = top.finest.grid
    outer = linear.outer[grid]
    assert outer.reached
    assert len(outer.steps.targets) <= 8
    measurement = linear.measured(grid)
    assert isinstance(measurement, NonlinearMeasurement)
    seen = lit(linear, grid)
    # Sharp layers through a smooth prior: what is left is mostly their edges.
    assert rms((top.model.reshape(-1) - truth)[seen]) < 0.75 * rms((measurement.start - truth)[seen])
    assert top.ladder.verdict.word == "settled"
    assert top.ladder.change[1] < 0.02
    assert top.ladder.change[0] > 2 * top.ladder.change[1]

    # On white ground the answer has no limit: doubling the nodes goes on changing it.
    white, _, _ = solved("ground.smoothness=0")
    assert white.ladder.verdict.word == "drifting"
    assert white.ladder.change[1] > 0.8 * white.ladder.change[0]


def test_a_tenth_of_wild_picks_costs_the_ground_at_most_a_twentieth() -> None:
    clean, linear, truth = solved(*COARSE)
    seen = lit(linear, clean.finest.grid)
    robust, weighted, _ = solved(*COARSE, wild=0.1)
    assert np.all(linear.weights == 1)
    assert 0.09 < np.mean(weighted.weights < 0.5) < 0.13
    error = rms((clean.model.reshape(-1) - truth)[seen])
    assert rms((robust.model.reshape(-1) - truth)[seen]) < 1.05 * error

    # Least squares would have followed them.
    plain, _, _ = solved(*COARSE, "errors.outliers=off", wild=0.1)
    assert rms((plain.model.reshape(-1) - truth)[seen]) > 1.3 * error
