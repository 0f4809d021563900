"""What settings will not do what their user hopes, told before the run and in its products."""

from __future__ import annotations

from collections.abc import Sequence

from stillground.config import Config
from stillground.grid import Grid
from stillground.refinement import rough_limit


def advise(profile: str, grids: Sequence[Grid], config: Config) -> tuple[str, ...]:
    """Sentences on the grids and the prior of a profile; none is an error."""
    kind = config.kind
    ground = config.ground
    said: list[str] = []
    rough = rough_limit(ground.smoothness, kind.regularity)
    if rough is not None:
        said.append(f"ground.smoothness = {ground.smoothness:g}: {rough}; take 2")
    for axis, length, h in zip(
        kind.axes, ground.correlation.along(kind.axes), grids[-1].spacing, strict=True
    ):
        if 2 * h > length:
            said.append(
                f"{profile}: the finest spacing of {h:g} m is too wide for correlation over {length:g} m "
                f"along {axis}; take ground.spacing of {length / 4:g} m or less"
            )
    if len(grids) < 3:
        said.append(
            f"refinement.levels = {len(grids)}: fewer than 3 rungs cannot tell whether the answer settles"
        )
    return tuple(said)
