"""What all profiles of a run have in common: the map through them, and the layers of the survey."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import replace
from pathlib import Path

import numpy as np
import pandas as pd
import xarray as xr

from stillground.config import Config
from stillground.errors import ConfigError
from stillground.grid import Grid
from stillground.pipeline.labels import ProfileResult, plan_trace, reach, survey_crs
from stillground.pipeline.profiles import Profile
from stillground.products.cf import plan_unit
from stillground.products.line import Line
from stillground.products.map import Slicing, map_dataset, map_nodes, nice, write_map
from stillground.products.picture import product
from stillground.products.provenance import CAUTION, Provenance
from stillground.products.rays import rays_of
from stillground.products.survey import survey_dataset, write_survey
from stillground.protocols import Integers

# Values of one variable of a map: some 80 MB.
_MOST_VALUES = 20_000_000
_MOST_SLICES = 20
# Nodes of a map across the correlation length.
_ACROSS = 8


def line(result: ProfileResult) -> Line:
    """A finished profile as the map and the survey's layers need it."""
    groupings = result.arrays.groupings
    stations = _stations(result.profile, groupings, result.history, result.fit)
    return _line(result.profile, result.picture, stations, result.history, result.fit)


def recalled(folder: Path, files: Mapping[str, str], profile: Profile, grid: Grid) -> Line:
    """The same of a profile that an earlier run finished, from its files; any grid of it will do."""

    def opened(name: str) -> xr.Dataset:
        # As they were written: flags shall stay flags.
        return xr.load_dataset(folder / files[name], engine="netcdf4", mask_and_scale=False)

    history = opened("history") if "history" in files else xr.Dataset()
    fit = pd.read_csv(folder / files["fit"])
    stations = _stations(profile, profile.scene.assemble(grid).groupings, history, fit)
    return _line(profile, opened(product(len(grid.axes))), stations, history, fit)


def write_site(
    folder: Path, lines: Sequence[Line], slicing: Slicing | None, config: Config, provenance: Provenance
) -> dict[str, Path]:
    """Writes the map, where there is a slicing, and the survey's layers if wanted; paths by product."""
    crs = survey_crs(config)
    said = [str(line.picture.attrs["comment"]).removeprefix(CAUTION).strip() for line in lines]
    provenance = replace(provenance, cautions=" ".join(dict.fromkeys(filter(None, said))))
    written = {}
    if slicing is not None:
        written["map"], *_ = write_map(folder, map_dataset(lines, slicing, crs=crs, provenance=provenance))
    if "survey" in config.output.products:
        units = config.kind.datum_units
        layers = survey_dataset(lines, static_units=units, crs=crs, provenance=provenance)
        written["survey"] = write_survey(folder, layers)
    return written


def plan_slices(profiles: Sequence[tuple[Profile, Grid]], config: Config) -> Slicing:
    """How the configuration cuts a map through profiles on their finest grids.

    Raises
    ------
    ConfigError
        When the map would have too many nodes.
    """
    settings, lengths, crs = config.map, config.ground.correlation, survey_crs(config)
    horizontal = lengths.vertical if lengths.horizontal is None else lengths.horizontal
    levels = settings.elevations or settings.depths or _depths(profiles, lengths.vertical)
    # Round in the unit that people read off the map.
    _, metres = plan_unit(crs)
    slicing = Slicing(
        spacing=settings.spacing or metres * nice(horizontal / metres / _ACROSS),
        levels=tuple(sorted(set(levels), reverse=settings.elevations is not None)),
        reach=reach(config),
        elevations=settings.elevations is not None,
    )
    places = np.vstack([np.column_stack(plan_trace(profile, grid.axes, crs)) for profile, grid in profiles])

    def values(spacing: float) -> int:
        ends = map_nodes(places, replace(slicing, spacing=spacing), crs)
        return len(slicing.levels) * math.prod(last - first + 1 for first, last in ends)

    fitting = slicing.spacing
    while values(fitting) > _MOST_VALUES:
        fitting = metres * nice(1.01 * fitting / metres)
    if settings.spacing and fitting > settings.spacing:
        raise ConfigError(
            f"map.spacing: at {settings.spacing:g} m the map of all profiles takes "
            f"{values(settings.spacing):,} values for each variable, {_MOST_VALUES:,} are the most; "
            f"take {fitting:g} m, or fewer slices"
        )
    return replace(slicing, spacing=fitting)


def _depths(profiles: Sequence[tuple[Profile, Grid]], vertical: float) -> list[float]:
    """Every correlation length down to the lowest node, or farther apart where that is many slices."""
    deepest = max(_ground_top(profile) - grid.axes[-1][0] for profile, grid in profiles)
    step = nice(max(vertical, deepest / _MOST_SLICES))
    return (step * np.arange(1, int(deepest / step) + 1)).tolist() or [deepest / 2]


def _ground_top(profile: Profile) -> float:
    surface = profile.scene.surface
    return profile.scene.upper[-1] if surface is None else float(surface[1].max())


def _line(
    profile: Profile, picture: xr.Dataset, stations: pd.DataFrame, history: xr.Dataset, fit: pd.DataFrame
) -> Line:
    scene = profile.scene
    return Line(
        name=profile.name,
        picture=picture,
        first=scene.lower[0],
        last=scene.upper[0],
        top=scene.upper[-1],
        stations=stations,
        rays=rays_of(history),
        fit=fit,
    )


def _stations(
    profile: Profile, groupings: Mapping[str, Integers], history: xr.Dataset, fit: pd.DataFrame
) -> pd.DataFrame:
    """Every position with the misfit of its data, numbered as the groupings and the statics are."""
    tables = []
    for what, group in groupings.items():
        if what not in profile.scene.positions:
            continue
        data = fit[["residual_over_error", "weight"]].groupby(np.asarray(group))
        static = history.get(f"{what}_static", xr.DataArray(np.nan)).to_numpy()
        table = _places(profile, what, group)
        tables.append(
            table.assign(
                what=what,
                number=np.arange(1, len(table) + 1),
                data=data.size(),
                residual=data["residual_over_error"].mean(),
                weight=data["weight"].mean(),
                static=np.broadcast_to(static, len(table)),
            )
        )
    columns = ["x", "y", "z", "what", "number", "data", "residual", "weight", "static"]
    return pd.concat(tables, ignore_index=True) if tables else pd.DataFrame(columns=columns)


def _places(profile: Profile, what: str, group: Integers) -> pd.DataFrame:
    """Where the positions truly stand, by the table; on the trace where it has no x, y, z of theirs."""
    survey, scene = profile.survey, profile.scene
    end = f"{what}_" if f"{what}_x" in survey else ""
    if all(f"{end}{axis}" in survey for axis in "xyz"):
        _, first = np.unique(group, return_index=True)
        return pd.DataFrame({axis: survey[f"{end}{axis}"].to_numpy()[first] for axis in "xyz"})
    places = scene.positions[what]
    east, north = scene.trace(places[:, 0] if places.shape[1] > 1 else np.zeros(len(places)))
    return pd.DataFrame({"x": east, "y": north, "z": places[:, -1]})
