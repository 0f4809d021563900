"""Reads and judges a survey without reconstructing: what is there, what is odd, what a run will cost."""

from __future__ import annotations

import time
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from functools import partial
from pathlib import Path

import numpy as np
import psutil
from matplotlib.figure import Figure

from stillground.config import Config
from stillground.grid import Grid
from stillground.pipeline.advice import advise
from stillground.pipeline.answer import plan_method, repeated_rung
from stillground.pipeline.capacity import memory, rows_on_grid
from stillground.pipeline.grids import correlation, plan_grids
from stillground.pipeline.labels import curves_of
from stillground.pipeline.linear import Measured, assembly
from stillground.pipeline.profiles import Profile, read_profiles
from stillground.products.figures import write_figures
from stillground.products.figures.distance import distance_figure
from stillground.products.figures.survey import survey_figure
from stillground.protocols import Measurement, NonlinearMeasurement
from stillground.reconstruct import Method, linearised_at, prepare
from stillground.rehearsal import FAMILIES
from stillground.sensitivity import RECONSTRUCTIONS
from stillground.solve import iterate, n_probes

_TIMED_STEPS = 3
# Linearisations that the outer steps of most surveys need, halved steps among them.
_OUTER_STEPS = 8
# Of every run; more where there are outer steps, data along a line, a rehearsal or a sensitivity.
_FIGURES = 5
# A figure as PNG and PDF, the report, or all files beside these: what it took where this was written.
_SECONDS_A_DRAWING = 0.4


@dataclass(frozen=True)
class Plan:
    """What a run of one profile will do and cost.

    ``memory`` of the whole process in bytes is predicted from sizes and leaves figures out.

    ``seconds`` come from a few timed steps: of the ladder with its outliers, rounding and noise part, of the
    outer steps of a nonlinear measurement on all rungs and from other starts, and of the rehearsal and the
    sensitivity where they are asked for; of the products from the number of figures. Usual surveys take half
    to twice as long; outer steps that do not reach their target, or pass by pass turn out more outliers, and
    reading, starting and compiling come on top.
    """

    profile: Profile
    grids: tuple[Grid, ...]
    advice: tuple[str, ...]
    memory: int
    seconds: dict[str, float]


def inspect(config: Config) -> tuple[Plan, ...]:
    """Plans a run of every profile; errors as `stillground.pipeline.run.run`, before any work."""
    return tuple(_plan(profile, config) for profile in read_profiles(config))


def _plan(profile: Profile, config: Config) -> Plan:
    grids = plan_grids(profile, config)
    n_data = profile.survey.sizes["datum"]
    return Plan(
        profile,
        grids,
        advise(profile, grids, config),
        memory(grids, n_data, config.solver.iterations, rows=rows_on_grid(config, n_data))
        + psutil.Process().memory_info().rss,
        _seconds(profile, grids, config),
    )


def draw(plan: Plan, config: Config, folder: Path) -> tuple[Path, ...]:
    """Writes figures of the survey into those of ``folder`` and gives the paths of the PNGs.

    ``<profile>_survey``, where rays that bend are those that a run begins with, and of data along a line on
    the surface ``<profile>_picks``: those of a run, with what the answer predicts, keep their name.
    """
    profile, grid = plan.profile, plan.grids[-1]
    scene, measurement = profile.scene, assembly(profile, config)(grid)
    rays = measurement.rays(measurement.start) if isinstance(measurement, NonlinearMeasurement) else ()
    survey = partial(
        survey_figure,
        profile.name,
        paths=scene.paths,
        positions=scene.positions,
        apparent=scene.apparent,
        against=scene.against,
        apart=scene.apart,
        seen=config.kind.ground_property,
        nodes=grid.axes,
        coverage=scene.coverage(grid, correlation(config), rays),
        surface=scene.surface,
    )
    curves = curves_of(profile, config, measurement.groupings, measurement.data, measurement.errors)
    drawn: dict[str, Callable[[], Figure]] = {"survey": survey}
    if curves is not None:
        drawn["picks"] = partial(distance_figure, profile.name, curves)
    return write_figures(folder / "figures", profile.name, drawn)[::2]


def _seconds(profile: Profile, grids: Sequence[Grid], config: Config) -> dict[str, float]:
    """Coarser rungs cost by their nodes; repeated work is timed on its own grid."""
    method, assemble = plan_method(config), assembly(profile, config)
    finest, _ = _at_start(assemble, grids[-1])
    share = sum(grid.n_nodes for grid in grids) / grids[-1].n_nodes
    # Once before it counts, since that includes compiling.
    _seconds_of(finest, grids[-1], method, 1)
    _, outer = _at_start(assemble, grids[-1])
    # As much again for outliers, for what rounding alone changes, and for the noise part.
    found = {"ladder": 2 * share * _seconds_of(finest, grids[-1], method, 1)}
    repeated = grids[repeated_rung(grids)]
    coarse, again = _at_start(assemble, repeated)
    once = _seconds_of(coarse, repeated, method, 1)
    pilot, figures = assemble(repeated), _FIGURES
    if isinstance(pilot, NonlinearMeasurement):
        leading = grids[max(len(grids) - 2, 0)].n_nodes / grids[-1].n_nodes
        passes = share + (leading if config.errors.outliers != "off" else 0.0)
        found["outer steps"] = passes * outer + len(pilot.other_starts) * (again + once)
        figures += 2
    if config.rehearsal.twins:
        families = len(FAMILIES) + (config.simulate is not None)
        together = _seconds_of(coarse, repeated, method, config.rehearsal.twins)
        found["rehearsal"] = families * together
        figures += 1
    if config.sensitivity.vary:
        found["sensitivity"] = RECONSTRUCTIONS * once
        figures += 1
    wanted = config.output.products
    drawn = 1 + figures * ("figures" in wanted) + ("report" in wanted)
    return found | {"products": _SECONDS_A_DRAWING * drawn}


def _at_start(assemble: Measured, grid: Grid) -> tuple[Measurement, float]:
    """The measurement on a grid, linearised at its start, and the seconds that its outer steps will take."""
    measurement = assemble(grid)
    if not isinstance(measurement, NonlinearMeasurement):
        return measurement, 0.0
    begin = time.perf_counter()
    linear, _ = linearised_at(measurement, measurement.start)
    return linear, _OUTER_STEPS * (time.perf_counter() - begin)


def _seconds_of(measurement: Measurement, grid: Grid, method: Method, problems: int) -> float:
    """What an iteration with so many problems beside each other will take, from a few timed steps."""
    begin = time.perf_counter()
    columns = problems * (1 + n_probes(measurement.data.size))
    problem = prepare(measurement, grid, method, products=columns * method.iterations)
    b = np.tile(problem.standard.b[:, None], problems)
    stamps = [
        time.perf_counter()
        for _ in iterate(method.solver, problem.operator, b, min(_TIMED_STEPS, method.iterations))
    ]
    step = (stamps[-1] - stamps[0]) / max(len(stamps) - 1, 1)
    return stamps[0] - begin + method.iterations * step
