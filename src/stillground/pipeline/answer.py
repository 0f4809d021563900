"""One profile's answer: climb the ladder, then gather what the products need."""

from __future__ import annotations

from collections.abc import Generator, Iterator, Sequence

import numpy as np

from stillground import plugins
from stillground.config import Config
from stillground.grid import Grid
from stillground.pipeline.capacity import SNAPSHOT_VALUES
from stillground.pipeline.grids import correlation
from stillground.pipeline.profiles import Profile
from stillground.protocols import Array, Choice, Progress, Result, RuleOptions
from stillground.reconstruct import Method
from stillground.refinement import Climb, climb
from stillground.solve.columns import norm


def answer(profile: Profile, grids: Sequence[Grid], config: Config) -> Generator[Progress, None, Result]:
    """Reconstructs a profile on its ladder of grids, coarse to fine.

    Yields
    ------
    Progress

    Returns
    -------
    Result
    """
    method = plan_method(config)
    top = yield from climb(profile.scene.assemble, grids, method, config.refinement.tolerance)

    finest, measurement = top.finest, top.finest.measurement
    choices = tuple(_choice(top, name) for name in method.rules)
    chosen = next(choice for choice in choices if choice.rule == method.choose)
    whitened = finest.run.residual(chosen.iteration)
    return Result(
        property=plugins.kind(config.survey.kind).ground_property,
        axes=finest.grid.axes,
        background=finest.standard.background.reshape(finest.grid.shape),
        model=top.model,
        mesh_change=top.mesh_change,
        anomaly=top.anomaly,
        coverage=profile.scene.coverage(finest.grid, method.correlation),
        predicted=measurement.data - measurement.errors * whitened,
        observed=measurement.data,
        errors=measurement.errors,
        groupings=measurement.groupings,
        history=finest.run.history,
        choices=choices,
        chosen=chosen,
        snapshots=tuple(_snapshots(top)),
        ladder=top.ladder,
    )


def plan_method(config: Config) -> Method:
    """How a configuration asks to reconstruct."""
    return Method(
        correlation=correlation(config),
        smoothness=config.ground.smoothness,
        solver=plugins.solver(config.solver.method),
        iterations=config.solver.iterations,
        rules={name: plugins.rule(name) for name in config.stopping.judged},
        choose=config.stopping.choose,
        options=RuleOptions(tau=config.stopping.tau),
        background=config.ground.background,
    )


def _choice(top: Climb, rule: str) -> Choice:
    finest, grid = top.finest, top.finest.grid
    stop = finest.stop(rule)
    residual = finest.run.residual(stop)
    model = finest.model(stop)
    size = top.anomaly * float(np.sqrt(np.prod(grid.lengths)))
    return Choice(
        rule=rule,
        pick=finest.picks[rule],
        iteration=stop,
        chi_square=float(residual @ residual) / residual.size,
        roughness=float(norm(finest.run.solution(stop)[:, None])[0]),
        distance=grid.norm(model - top.model) / size if size > 0 else None,
        model=model,
    )


def _snapshots(top: Climb) -> Iterator[tuple[int, Array]]:
    kept = len(top.finest.run.solutions)
    stride = int(np.ceil(kept * top.finest.grid.n_nodes / SNAPSHOT_VALUES))
    for iteration in range(0, kept, max(stride, 1)):
        yield iteration, top.finest.model(iteration)
