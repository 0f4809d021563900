"""What a profile's ladder iterates on: its measurement, or the last linearisation of a nonlinear one."""

from __future__ import annotations

from collections.abc import Callable, Generator, Mapping, Sequence
from dataclasses import dataclass, field, replace

import numpy as np

from stillground.config import Config
from stillground.errors import ConfigError
from stillground.grid import Grid, prolong
from stillground.pipeline.profiles import Profile
from stillground.progress import staged
from stillground.protocols import Array, Measurement, NonlinearMeasurement, Progress
from stillground.reconstruct import (
    Linearised,
    Method,
    Reconstruction,
    linearise,
    reconstruct,
    reweighted,
    with_delay,
    with_statics,
)

Measured = Callable[[Grid], Measurement | NonlinearMeasurement]


@dataclass(frozen=True)
class Linear:
    """From a grid of the ladder to the linear measurement on it, data weighted.

    Parameters
    ----------
    measured : callable
        From a grid to the measurement with the stated errors, linear or not.
    grids : tuple of Grid
        The ladder; where the user broke off, what of it was linearised by then.
    weights : array, shape (n_data,)
        Of the data.
    outer : mapping of Grid to Linearised
        What the outer loop left of a nonlinear measurement; empty of a linear one.
    """

    measured: Measured
    grids: tuple[Grid, ...]
    weights: Array
    outer: Mapping[Grid, Linearised] = field(default_factory=dict)

    def stated(self, grid: Grid) -> Measurement:
        """The linear measurement with the stated errors."""
        if grid in self.outer:
            return self.outer[grid].measurement
        measurement = self.measured(grid)
        assert isinstance(measurement, Measurement)
        return measurement

    def moved(self, grid: Grid) -> float | None:
        """Relative L2 change of the outer steps' model since the rung before; None where there is none."""
        if grid not in self.outer or grid == self.grids[0]:
            return None
        before = self.grids[self.grids.index(grid) - 1]
        here, there = self.outer[grid].field, self.outer[before].field.reshape(before.shape)
        change = here - prolong(there, before, grid).reshape(-1)
        return grid.norm(change) / grid.norm(here - grid.mean(here))

    def __call__(self, grid: Grid) -> Measurement:
        return reweighted(self.stated(grid), self.weights)


def assembly(profile: Profile, config: Config) -> Measured:
    """From a grid to the measurement with the extra unknowns and prior mean that a configuration asks for."""
    units = config.kind.datum_units

    def assemble(grid: Grid) -> Measurement | NonlinearMeasurement:
        measurement = profile.scene.assemble(grid)
        if isinstance(measurement, NonlinearMeasurement) and config.ground.background is not None:
            raise ConfigError(
                f"ground.background: {config.kind.name} is told by its own settings, [physics], where to "
                f"begin; leave this one out"
            )
        measurement = with_statics(measurement, config.errors.statics, units)
        return with_delay(measurement, units) if config.errors.delay == "fit" else measurement

    return assemble


def linear_ladder(
    profile: Profile, config: Config, grids: Sequence[Grid], method: Method
) -> Generator[Progress, None, Linear]:
    """Linearises a nonlinear measurement on every grid, all with the same outer steps and weights.

    Both are found on the finest grid but one, whose predictions are nearly those of the finest. Of a linear
    measurement there is nothing to do. A keyboard interrupt ends the ladder at the rung before, if any.

    Yields
    ------
    Progress
    """
    measured = assembly(profile, config)
    plain = Linear(measured, tuple(grids), np.ones(profile.survey.sizes["datum"]))
    leader = grids[max(len(grids) - 2, 0)]
    pilot = measured(leader)
    if not isinstance(pilot, NonlinearMeasurement):
        return plain
    work = linearise(pilot, leader, method, outliers=config.errors.outliers)
    led = yield from staged(work, "outer steps of the nonlinear measurement")
    outer: dict[Grid, Linearised] = {}
    try:
        for number, grid in enumerate(grids, start=1):
            if grid is leader:
                outer[grid] = led
                continue
            measurement = measured(grid)
            assert isinstance(measurement, NonlinearMeasurement)
            homing = len(led.steps.homing) - 1
            work = linearise(
                measurement, grid, method, targets=led.steps.targets, homing=homing, weights=led.weights
            )
            outer[grid] = yield from staged(work, f"outer steps on rung {number} of {len(grids)}")
    except KeyboardInterrupt:
        if not outer:
            raise
    return replace(plain, grids=tuple(grids[: len(outer)]), weights=led.weights, outer=outer)


def asked(linear: Linear, method: Method) -> Method:
    """The method, asking for no lower misfit than the outer steps came to where they missed their target.

    Where the errors stated are not trusted, the rules go by those that cross-validation finds.
    """
    outer = linear.outer.get(linear.grids[-1])
    if outer is None or outer.steps.reached or not method.trust:
        return method
    tau = max(method.options.tau, float(np.sqrt(outer.steps.misfits[-1])))
    return replace(method, options=replace(method.options, tau=tau))


def start_dependence(linear: Linear, rung: Reconstruction) -> Generator[Progress, None, dict[str, float]]:
    """How far the answer on a rung moves from other starts, relative L2 in the unknown; empty if linear.

    Yields
    ------
    Progress
    """
    grid, method = rung.grid, rung.method
    measurement = linear.measured(grid)
    if not isinstance(measurement, NonlinearMeasurement):
        return {}
    base = rung.model(rung.stop(method.choose))
    size = grid.norm(base - grid.mean(base))
    moved = {}
    for name, start in measurement.other_starts.items():
        work = linearise(replace(measurement, start=start), grid, method, weights=linear.weights)
        outcome = yield from staged(work, f"start: {name}")
        judged = reconstruct(reweighted(outcome.measurement, linear.weights), grid, method)
        found = yield from staged(judged, f"start: {name}")
        other = found.model(found.stop(method.choose))
        moved[name] = grid.norm(other - base) / size if size > 0 else 0.0
    return moved
