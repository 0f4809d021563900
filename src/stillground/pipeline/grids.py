"""Where the ground is modelled, and on which grids."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np

from stillground.config import Config
from stillground.errors import ConfigError, GridError
from stillground.grid import Grid, ladder, ladder_up_to
from stillground.pipeline.capacity import refuse_too_large
from stillground.pipeline.profiles import Profile
from stillground.protocols import Array

# How far a stated spacing may differ from a survey's own, of itself.
_SAME = 1e-3


def correlation(config: Config) -> tuple[float, ...]:
    """Correlation lengths along the axes of the ground, m."""
    return config.ground.correlation.along(config.kind.axes)


def plan_grids(profile: Profile, config: Config) -> tuple[Grid, ...]:
    """The rungs for a profile, coarse to fine: its positions and the margin, down to the depth.

    A survey that comes with a grid has it for the finest rung.

    Raises
    ------
    ConfigError
        When a spacing is missing or larger than the survey, the depth leaves positions outside, the extent
        is too small for the coarsest rung, or settings contradict the survey's own grid.
    CapacityError
        When the finest rung needs more memory than the machine has free.
    """
    scene, ground = profile.scene, config.ground
    if scene.grid is not None:
        grids = _up_to(scene.grid, profile.name, config)
        refuse_too_large(profile.name, grids, profile.survey.sizes["datum"], config)
        return grids
    if ground.spacing is None:
        raise ConfigError('ground.spacing is missing; give the distance of nodes, like "0.5 m"')
    axes = config.kind.axes
    spacing = ground.spacing.along(axes)
    margin = [length / 2 if ground.margin is None else ground.margin for length in correlation(config)]
    bottom = scene.lower[-1]
    depth = scene.depth if ground.depth is None else ground.depth
    if depth is not None:
        ground_point = scene.upper[-1]
        if scene.surface is not None:
            # Over the positions only: a surface may go on far beyond them.
            reach = np.linspace(scene.lower[0], scene.upper[0], 200) if len(scene.lower) > 1 else 0.0
            ground_point = float(np.min(np.interp(reach, *scene.surface)))
        bottom = ground_point - depth
        if bottom > scene.lower[-1]:
            raise ConfigError(
                f"ground.depth: {depth:g} m reach down to {bottom:.6g} m, but {profile.name} has "
                f"a position at {scene.lower[-1]:.6g} m; take at least {ground_point - scene.lower[-1]:.3g} m"
            )
    lower = [low - pad for low, pad in zip(scene.lower, margin, strict=True)]
    upper = [high + pad for high, pad in zip(scene.upper, margin, strict=True)]
    lower[-1] = bottom - margin[-1]
    extent = max(high - low for low, high in zip(scene.lower, scene.upper, strict=True))
    most = _widest(extent, np.subtract(upper, lower), spacing, config)
    if extent < max(spacing):
        raise ConfigError(
            f"ground.spacing: {max(spacing):g} m is larger than the survey {profile.name}, {extent:.3g} m "
            f"across; {most}"
        )
    try:
        grids = ladder(lower, upper, spacing, config.refinement.levels)
    except GridError as error:
        raise ConfigError(f"profile {profile.name}: {error}; {most}") from error
    refuse_too_large(profile.name, grids, profile.survey.sizes["datum"], config)
    return grids


def _widest(extent: float, widths: Array, spacing: Sequence[float], config: Config) -> str:
    """The largest spacing that a ladder of so many levels takes over ground of these widths."""
    levels = config.refinement.levels
    most = np.minimum(widths / 2**levels, extent)
    if len(set(spacing)) == 1:
        found = f"{_round_down(float(most.min()))} m"
    else:
        found = " and ".join(
            f"{_round_down(float(h))} m along {axis}" for axis, h in zip(config.kind.axes, most, strict=True)
        )
    return f"for refinement.levels = {levels} take at most {found}"


def _up_to(finest: Grid, profile: str, config: Config) -> tuple[Grid, ...]:
    """The rungs up to a survey's own grid, which settings of the ground must not contradict."""
    ground, levels = config.ground, config.refinement.levels
    for name in ("margin", "depth"):
        if getattr(ground, name) is not None:
            raise ConfigError(f"ground.{name}: the grid of {profile} is the survey's own; leave it out")
    if ground.spacing is not None:
        for axis, asked, h in zip(
            config.kind.axes, ground.spacing.along(config.kind.axes), finest.spacing, strict=True
        ):
            if abs(asked - h) > _SAME * h:
                raise ConfigError(
                    f"ground.spacing: {asked:g} m along {axis}, but the nodes of {profile} are {h:g} m "
                    f"apart; leave it out"
                )
    try:
        return ladder_up_to(finest, levels)
    except GridError as error:
        most = _most_levels(finest)
        raise ConfigError(
            f"refinement.levels = {levels}: {error}, since every coarser rung takes every second node of "
            f"{profile}; take {most} at most, or a table with more nodes, as "
            f"{' by '.join(str(_next_count(n, finest, levels)) for n in finest.intervals)}"
        ) from error


def _most_levels(finest: Grid) -> int:
    levels = 1
    while True:
        try:
            ladder_up_to(finest, levels + 1)
        except GridError:
            return levels
        levels += 1


def _next_count(intervals: int, finest: Grid, levels: int) -> int:
    """The next number of evenly spaced nodes whose intervals pair as often as ``levels`` ask."""
    step = finest.rule.intervals << (levels - 1)
    return max(math.ceil(intervals / step), 2) * step + 1


def _round_down(value: float) -> str:
    step = 10.0 ** (math.floor(math.log10(value)) - 1)
    return f"{math.floor(value / step) * step:g}"
