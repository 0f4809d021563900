"""Reads and judges a survey without reconstructing: what is there, what is odd, what a run will cost."""

from __future__ import annotations

import time
from collections.abc import Sequence
from dataclasses import dataclass, replace
from pathlib import Path

import psutil

from stillground.config import Config
from stillground.grid import Grid
from stillground.pipeline.advice import advise
from stillground.pipeline.answer import plan_method
from stillground.pipeline.capacity import memory, rows_on_grid
from stillground.pipeline.grids import correlation, plan_grids
from stillground.pipeline.profiles import Profile, read_profiles
from stillground.products.figures.sheet import write_figure
from stillground.products.figures.survey import survey_figure
from stillground.progress import finish
from stillground.reconstruct import reconstruct

_TIMED_STEPS = 3


@dataclass(frozen=True)
class Plan:
    """What a run of one profile will do and cost.

    ``memory`` of the whole process in bytes is predicted from sizes, ``seconds`` from a few timed steps on
    the finest rung; both leave figures out.
    """

    profile: Profile
    grids: tuple[Grid, ...]
    advice: tuple[str, ...]
    memory: int
    seconds: float


def inspect(config: Config) -> tuple[Plan, ...]:
    """Plans a run of every profile; errors as `stillground.pipeline.run.run`, before any work."""
    return tuple(_plan(profile, config) for profile in read_profiles(config))


def _plan(profile: Profile, config: Config) -> Plan:
    grids = plan_grids(profile, config)
    n_data = profile.survey.sizes["datum"]
    return Plan(
        profile,
        grids,
        advise(profile.name, grids, config),
        memory(grids, n_data, config.solver.iterations, rows=rows_on_grid(config, n_data))
        + psutil.Process().memory_info().rss,
        _seconds(profile, grids, config),
    )


def draw(plan: Plan, config: Config, folder: Path) -> Path:
    """Writes ``<profile>_survey`` into the figures of ``folder`` and gives the path of the PNG."""
    scene, grid = plan.profile.scene, plan.grids[-1]
    figure = survey_figure(
        plan.profile.name,
        paths=scene.paths,
        positions=scene.positions,
        apparent=scene.apparent,
        against=scene.against,
        seen=config.kind.ground_property,
        nodes=grid.axes,
        coverage=scene.coverage(grid, correlation(config)),
        surface=scene.surface,
    )
    return write_figure(folder / "figures", f"{plan.profile.name}_survey", figure)[0]


def _seconds(profile: Profile, grids: Sequence[Grid], config: Config) -> float:
    """Times a few steps of the iteration on the finest rung; coarser rungs cost by their nodes."""
    few = replace(plan_method(config), iterations=_TIMED_STEPS, rules={})
    measurement = profile.scene.assemble(grids[-1])
    took = 0.0
    # Twice, since the first includes compiling.
    for _ in range(2):
        begin = time.perf_counter()
        finish(reconstruct(measurement, grids[-1], few))
        took = time.perf_counter() - begin
    share = sum(grid.n_nodes for grid in grids) / grids[-1].n_nodes
    return took / _TIMED_STEPS * share * config.solver.iterations
