"""The survey's tables as checked profiles, each set into the ground."""

from __future__ import annotations

from dataclasses import dataclass

import xarray as xr

from stillground.config import Config
from stillground.errors import ConfigError, SurveyError
from stillground.protocols import Known, Scene
from stillground.survey import SurveyReport, check, profiles, read, read_known, require_file


@dataclass(frozen=True)
class Profile:
    """One line of a survey: its usable rows, what the check found in its file, and its scene."""

    name: str
    survey: xr.Dataset
    report: SurveyReport
    scene: Scene


def read_profiles(config: Config) -> tuple[Profile, ...]:
    """Reads and checks all files of the survey.

    Raises
    ------
    SurveyError
        With all faults of all tables.
    ConfigError
        When two files give profiles of one name, or a CRS is stated for data without a place in plan.
    """
    kind = config.kind
    found: dict[str, Profile] = {}
    refused: list[SurveyError] = []
    for path in config.survey.files:
        try:
            require_file(path, "survey.files")
            table = read(
                path, columns=config.survey.columns, units=config.survey.units, expected=kind.columns
            )
            placed = place(table, path.stem, config)
        except SurveyError as error:
            refused.append(error)
            continue
        for profile in placed:
            if profile.name in found:
                raise ConfigError(
                    f"survey.files: two tables give a profile named '{profile.name}'; rename one of the files"
                )
            found[profile.name] = profile
    if len(refused) == 1:
        raise refused[0]
    if refused:
        raise SurveyError(f"{len(refused)} tables", [str(error) for error in refused])
    return tuple(found.values())


def read_overlays(config: Config) -> tuple[Known, ...]:
    """Reads the known ground that is to be set beside the answer; `SurveyError` for a faulty table."""
    for one in config.overlay:
        require_file(one.file, "overlay.file")
    return tuple(read_known(one.file, config.kind.ground_property) for one in config.overlay)


def checked(table: xr.Dataset, config: Config) -> tuple[xr.Dataset, SurveyReport]:
    """The usable rows of a table, with errors as the configuration makes them; errors as `read_profiles`."""
    kind = config.kind
    return check(
        table,
        datum=kind.datum,
        expected=kind.columns,
        floor=config.errors.floor,
        relative=config.errors.relative,
    )


def place(table: xr.Dataset, stem: str, config: Config) -> tuple[Profile, ...]:
    """Checks a table and sets each of its lines into the ground; errors as `read_profiles`."""
    kind = config.kind
    usable, report = checked(table, config)
    found = tuple(
        Profile(name, line, report, kind.place(line, config.physics))
        for name, line in profiles(usable, stem).items()
    )
    for profile in found:
        if config.survey.crs is not None and not profile.scene.positions:
            raise ConfigError(
                f"survey.crs = '{config.survey.crs}': data of kind '{kind.name}' have no place in plan, and "
                f"{profile.name} would be shown in a wrong one; leave it out"
            )
    return found
