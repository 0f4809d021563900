"""Where the ground is modelled, on which grids, and what memory that will take."""

from __future__ import annotations

import math

import numpy as np
import psutil

from stillground import plugins
from stillground.config import Config
from stillground.errors import CapacityError, ConfigError, GridError
from stillground.grid import Grid, ladder
from stillground.pipeline.profiles import Profile
from stillground.solve.run import KEPT_BYTES, n_probes


def correlation(config: Config) -> tuple[float, ...]:
    """Correlation lengths along the axes of the ground, m."""
    return config.ground.correlation.along(plugins.kind(config.survey.kind).axes)


def plan_grids(profile: Profile, config: Config) -> tuple[Grid, ...]:
    """The rungs for a profile, coarse to fine: its positions and the margin, down to the depth.

    Raises
    ------
    ConfigError
        When a spacing is larger than the survey, the depth leaves positions outside, or the extent
        is too small for the coarsest rung.
    CapacityError
        When the finest rung needs more memory than the machine has free.
    """
    scene, ground = profile.scene, config.ground
    axes = plugins.kind(config.survey.kind).axes
    spacing = ground.spacing.along(axes)
    margin = [length / 2 if ground.margin is None else ground.margin for length in correlation(config)]
    for axis, low, high, h in zip(axes, scene.lower, scene.upper, spacing, strict=True):
        if high - low < h:
            raise ConfigError(
                f"ground.spacing: {h:g} m is larger than the survey {profile.name}, {high - low:.3g} m "
                f"along {axis}; take at most {_round_down((high - low) / 10)} m"
            )
    bottom = scene.lower[-1]
    if ground.depth is not None:
        ground_point = float(np.min(scene.surface[1])) if scene.surface else scene.upper[-1]
        bottom = ground_point - ground.depth
        if bottom > scene.lower[-1]:
            raise ConfigError(
                f"ground.depth: {ground.depth:g} m reach down to {bottom:.6g} m, but {profile.name} has "
                f"a position at {scene.lower[-1]:.6g} m; take at least {ground_point - scene.lower[-1]:.3g} m"
            )
    lower = [low - pad for low, pad in zip(scene.lower, margin, strict=True)]
    upper = [high + pad for high, pad in zip(scene.upper, margin, strict=True)]
    lower[-1] = bottom - margin[-1]
    try:
        grids = ladder(lower, upper, spacing, config.refinement.levels)
    except GridError as error:
        raise ConfigError(f"profile {profile.name}: {error}") from error
    _refuse_too_large(grids, profile, config)
    return grids


def memory(grids: tuple[Grid, ...], n_data: int, iterations: int) -> int:
    """Predicted peak of a climb, bytes: kept iterates of all rungs and work arrays of the finest."""
    columns = 1 + n_probes(n_data)
    kept = sum(min(KEPT_BYTES, 8 * grid.n_nodes * (iterations + 1)) for grid in grids)
    work = 8 * grids[-1].n_nodes * columns * 24
    data_side = 8 * n_data * iterations * (2 * columns + 1)
    products = 8 * grids[-1].n_nodes * 40
    return kept + work + data_side + products


def _refuse_too_large(grids: tuple[Grid, ...], profile: Profile, config: Config) -> None:
    need = memory(grids, profile.survey.sizes["datum"], config.solver.iterations)
    free = psutil.virtual_memory().available
    if need > free:
        shape = " by ".join(str(n) for n in grids[-1].shape)
        factor = (need / free) ** (1 / len(grids[-1].shape))
        spacing = _round_up(max(grids[-1].spacing) * factor * 1.05)
        raise CapacityError(
            f"profile {profile.name}: the finest rung of {shape} nodes needs about {need / 2**30:.3g} GiB, "
            f"this machine has {free / 2**30:.3g} GiB free; take ground.spacing of {spacing} m or more, "
            f"or a smaller margin or depth"
        )


def _round_down(value: float) -> str:
    step = 10.0 ** (math.floor(math.log10(value)) - 1)
    return f"{math.floor(value / step) * step:g}"


def _round_up(value: float) -> str:
    step = 10.0 ** (math.floor(math.log10(value)) - 1)
    return f"{math.ceil(value / step) * step:g}"
