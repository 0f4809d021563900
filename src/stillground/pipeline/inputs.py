"""The files that a run reads, none of which it may write over."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

from stillground.config import Config
from stillground.errors import ConfigError
from stillground.pipeline.profiles import Profile

# Ends of the names of a profile's files, always and by the product asked for.
_ALWAYS = ("_ladder.nc", "_fit.csv")
_ASKED = {
    "section": ("_section.nc", "_column.nc"),
    "history": ("_history.nc",),
    "curtain": ("_curtain.nc", "_curtain.qml"),
    "points": ("_points.csv",),
}


def inputs(profiles: Sequence[Profile], config: Config) -> tuple[Path, ...]:
    """All files that a run reads beside its configuration: the survey's, known ground, those of scenes."""
    beside = [path for profile in profiles for path in profile.scene.inputs]
    return tuple(dict.fromkeys([*config.survey.files, *(one.file for one in config.overlay), *beside]))


def refuse_to_replace(profiles: Sequence[Profile], config: Config, folder: Path) -> None:
    """Raises `ConfigError` where a run into a folder would write over a file that it reads."""
    wanted = config.output.products
    ends = [*_ALWAYS, *(end for product in wanted for end in _ASKED.get(product, ()))]
    if config.overlay:
        ends.append("_overlay.csv")
    written = [folder / f"{profile.name}{end}" for profile in profiles for end in ends]
    written += [folder / f"{product}.nc" for product in ("map", "survey") if product in wanted]
    standing = [path for path in written if path.exists()]
    for path in inputs(profiles, config):
        if path.exists() and any(path.samefile(other) for other in standing):
            raise ConfigError(
                f"{path} is read by this run, and this run would write over it; give another --out or move it"
            )
