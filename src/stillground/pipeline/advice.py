"""What settings will not do what their user hopes, told before the run and in its products."""

from __future__ import annotations

from collections.abc import Sequence

from stillground.config import Config
from stillground.grid import Grid


def advise(profile: str, grids: Sequence[Grid], config: Config) -> tuple[str, ...]:
    """Sentences on the grids and the prior of a profile; none is an error."""
    kind = config.kind
    ground = config.ground
    said: list[str] = []
    if ground.smoothness <= kind.bounded_above:
        said.append(
            f"ground.smoothness = {ground.smoothness:g}: on so rough a prior a {kind.name} measurement has "
            f"no limit as the grid is refined, so the answer cannot settle; take 2, or at least above "
            f"{kind.bounded_above:g}"
        )
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
