"""What settings will not do what their user hopes, told before the run and in its products."""

from __future__ import annotations

from collections.abc import Sequence

from stillground.config import Config
from stillground.grid import Grid
from stillground.pipeline.profiles import Profile
from stillground.refinement import WITHOUT_WEIGHTS, rough_limit


def advise(profile: Profile, grids: Sequence[Grid], config: Config) -> tuple[str, ...]:
    """Sentences on the grids and the prior of a profile; none is an error."""
    kind = config.kind
    ground = config.ground
    said: list[str] = []
    rough = rough_limit(ground.smoothness, kind.regularity)
    if not grids[-1].weighted:
        said.append(f'physics.weights: {WITHOUT_WEIGHTS}; this is to see what happens, take "standard"')
    elif rough is not None:
        said.append(f"ground.smoothness = {ground.smoothness:g}: {rough}; take 2")
    for axis, length, h in zip(
        kind.axes, ground.correlation.along(kind.axes), grids[-1].spacing, strict=True
    ):
        if 2 * h > length:
            finer = (
                "take ground.spacing of" if profile.scene.grid is None else "give a table with nodes every"
            )
            said.append(
                f"{profile.name}: the finest spacing of {h:g} m is too wide for correlation over "
                f"{length:g} m along {axis}; {finer} {length / 4:g} m or less"
            )
    if len(grids) < 3:
        said.append(
            f"refinement.levels = {len(grids)}: fewer than 3 rungs cannot tell whether the answer settles"
        )
    return tuple(said)
