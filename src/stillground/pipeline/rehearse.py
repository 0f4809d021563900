"""Rehearsals of a survey without its answer: rules on synthetic ground, and patterns of stated sizes."""

from __future__ import annotations

from collections.abc import Generator
from dataclasses import dataclass
from pathlib import Path

from stillground.config import Config
from stillground.grid import Grid
from stillground.pipeline.answer import plan_method, rehearse_profile, two_rungs
from stillground.pipeline.grids import plan_grids
from stillground.pipeline.labels import provenance
from stillground.pipeline.linear import Linear, asked, linear_ladder
from stillground.pipeline.profiles import Profile, read_profiles
from stillground.products.figures import write_pattern_figure, write_rehearsal_figure
from stillground.products.pattern import pattern_dataset, write_pattern
from stillground.products.summary import write_rehearsal
from stillground.progress import staged
from stillground.protocols import Measurement, Pattern, Progress, Rehearsal
from stillground.reconstruct import Method, Reconstruction, reconstruct
from stillground.rehearsal import through_patterns
from stillground.whole import require_writable

_TWINS = 30
# Sizes of patterns in correlation lengths, where none are given.
_SIZES = (0.5, 1.0, 2.0)


@dataclass(frozen=True)
class Rehearsed:
    """One profile's rehearsal, and where it was written."""

    name: str
    rehearsal: Rehearsal
    choose: str
    file: Path
    figure: Path


@dataclass(frozen=True)
class Patterns:
    """One profile's patterns, the stop they went through, and where they were written."""

    name: str
    patterns: tuple[Pattern, ...]
    stop: float
    file: Path
    figure: Path


def rehearse_all(
    config: Config, text: str, folder: Path, *, command: str, pattern: bool
) -> Generator[Progress | Rehearsed | Patterns, None, None]:
    """Rehearses every profile: rules on synthetic ground, or patterns where asked for.

    Yields
    ------
    Progress, Rehearsed or Patterns
    """
    twins = config.rehearsal.twins or _TWINS
    config = config.model_copy(update={"rehearsal": config.rehearsal.model_copy(update={"twins": twins})})
    profiles = read_profiles(config)
    plans = {profile.name: plan_grids(profile, config) for profile in profiles}
    require_writable(folder)
    for profile in profiles:
        grids = plans[profile.name]
        if pattern:
            yield (yield from _patterns(profile, grids, config, text, folder, command))
        else:
            method, pair, noise = plan_method(config), two_rungs(grids), 1.0
            linear = yield from _linear_pair(profile, config, pair, method)
            if not config.errors.trust:
                noise = (yield from _own_answer(linear(pair[0]), pair[0], method)).noise
            found = yield from rehearse_profile(profile, config, grids, linear, noise)
            choose = config.stopping.choose
            file = write_rehearsal(folder, profile.name, found, choose)
            figure = write_rehearsal_figure(folder / "figures", profile.name, found, choose)
            yield Rehearsed(profile.name, found, choose, file, figure)


def _linear_pair(
    profile: Profile, config: Config, pair: tuple[Grid, Grid], method: Method
) -> Generator[Progress, None, Linear]:
    """Both grids' measurements: one alone, where the user broke off, rehearses nothing."""
    linear = yield from linear_ladder(profile, config, pair, method)
    if len(linear.grids) < len(pair):
        raise KeyboardInterrupt
    return linear


def _own_answer(
    measurement: Measurement, grid: Grid, method: Method
) -> Generator[Progress, None, Reconstruction]:
    return (yield from staged(reconstruct(measurement, grid, method), "reconstructing the survey itself"))


def _patterns(
    profile: Profile, grids: tuple[Grid, ...], config: Config, text: str, folder: Path, command: str
) -> Generator[Progress, None, Patterns]:
    coarse, fine = two_rungs(grids)
    method = plan_method(config)
    linear = yield from _linear_pair(profile, config, (coarse, fine), method)
    method = asked(linear, method)
    sizes = config.rehearsal.patterns or [factor * method.correlation[-1] for factor in _SIZES]
    answer = yield from _own_answer(linear(coarse), coarse, method)
    stop = answer.stop(method.choose)
    patterns = yield from through_patterns(
        (coarse, linear(coarse)), (fine, linear(fine)), method, stop, sizes, seed=config.rehearsal.seed
    )
    origin = provenance((profile,), config, text, command)
    dataset = pattern_dataset(
        profile.name, patterns, coarse.axes, surface=profile.scene.surface, provenance=origin
    )
    file = write_pattern(folder, profile.name, dataset)
    figure = write_pattern_figure(
        folder / "figures", profile.name, patterns, coarse.axes, surface=profile.scene.surface
    )
    return Patterns(profile.name, patterns, stop, file, figure)
