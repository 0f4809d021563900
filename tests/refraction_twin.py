"""The ladder of the demo refraction line, whose times march through a described ground on a finer grid."""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import cache
from pathlib import Path

import numpy as np

from stillground.config import load
from stillground.pipeline.answer import plan_method
from stillground.pipeline.grids import plan_grids
from stillground.pipeline.linear import Linear, asked, linear_ladder
from stillground.pipeline.profiles import read_profiles
from stillground.pipeline.simulate import described_ground
from stillground.progress import finish
from stillground.protocols import Array, Measurement, NonlinearMeasurement
from stillground.refinement import Climb, climb

CONFIG = Path(__file__).parents[1] / "configs" / "osmere-weir-refraction.toml"


@dataclass(frozen=True)
class Twin:
    """A climbed ladder beside the true log slowness on its finest grid."""

    top: Climb
    linear: Linear
    truth: Array

    @property
    def measurement(self) -> NonlinearMeasurement:
        """On the finest grid."""
        measurement = self.linear.measured(self.top.finest.grid)
        assert isinstance(measurement, NonlinearMeasurement)
        return measurement

    @property
    def lit(self) -> Array:
        """The half of the finest grid's nodes with most ray through the answer."""
        grid = self.top.finest.grid
        measurement = self.linear.stated(grid)
        assert isinstance(measurement, Measurement)
        length = np.abs(measurement.operator.rmatvec(np.ones(measurement.data.size)))
        length = grid.local_mean(length, self.top.finest.method.correlation).reshape(-1)
        return length > np.median(length)

    def error(self, field: Array, among: Array) -> float:
        """Root mean square error of a log slowness among some nodes."""
        return float(np.sqrt(np.mean((field.reshape(-1) - self.truth)[among] ** 2)))


def twin(*overrides: str, seed: int | None = None, wild: float = 0.0, stated: float = 1.0) -> Twin:
    """Climbs the ladder.

    Parameters
    ----------
    *overrides : str
        ``key=value`` of the demo's configuration.
    seed : int, optional
        Of noise drawn anew; default: the demo's own table.
    wild : float
        Share of the times that are 4 to 15 ms off.
    stated : float
        Errors stated, over those of the noise.
    """
    config, _ = load(CONFIG, overrides)
    (profile,) = read_profiles(config)
    scene = profile.scene
    assert config.simulate is not None
    times = scene.data.copy()
    if seed is not None:
        times = exact_times() + scene.errors * np.random.default_rng(seed).standard_normal(times.size)
    random = np.random.default_rng(1000 + (seed or 0))
    spoilt = random.permutation(times.size)[: round(wild * times.size)]
    times[spoilt] += random.choice([-1.0, 1.0], spoilt.size) * random.uniform(4e-3, 15e-3, spoilt.size)
    profile = replace(profile, scene=replace(scene, data=times, errors=stated * scene.errors))
    method = plan_method(config)
    linear = finish(linear_ladder(profile, config, plan_grids(profile, config), method))
    method = asked(linear, method)
    top = finish(climb(linear, linear.grids, method, config.refinement.tolerance, config.kind.regularity))
    ground = described_ground(config.simulate, config.kind.axes)
    nodes = np.stack(np.meshgrid(*top.finest.grid.axes, indexing="ij"), axis=-1).reshape(-1, 2)
    return Twin(top, linear, np.log(ground.values(nodes)))


@cache
def exact_times() -> Array:
    """The demo's times without noise, s."""
    config, _ = load(CONFIG)
    (profile,) = read_profiles(config)
    assert config.simulate is not None
    return profile.scene.predict(described_ground(config.simulate, config.kind.axes))
