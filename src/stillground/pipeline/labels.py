"""A profile's answer with its labels on: what the product files hold, and what a notebook gets."""

from __future__ import annotations

import hashlib
import sys
from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass, replace
from importlib.metadata import version
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pyproj
import xarray as xr
from matplotlib.figure import Figure

from stillground.config import Config
from stillground.errors import ConfigError
from stillground.grid import Grid
from stillground.pipeline.advice import advise
from stillground.pipeline.inputs import inputs
from stillground.pipeline.profiles import Profile
from stillground.products.cf import plan_unit
from stillground.products.data_curves import DataCurves, data_curves
from stillground.products.figures import figures
from stillground.products.fit import fit_table
from stillground.products.history import history_dataset
from stillground.products.ladder import ladder_dataset
from stillground.products.notebook import display, misfit
from stillground.products.overlay import Overlay, overlay
from stillground.products.picture import picture_dataset
from stillground.products.provenance import Provenance, timestamp
from stillground.products.summary import profile_summary
from stillground.protocols import Array, Integers, Known, Result
from stillground.survey import row_numbers, to_si

_PACKAGES = ("stillground", "numpy", "scipy", "pylops", "xarray", "numba", "netCDF4")


@dataclass(frozen=True)
class ProfileResult:
    """One profile's labelled answer.

    Parameters
    ----------
    name : str
    picture, history, ladder : xarray.Dataset
        As in the files ``<name>_section.nc`` (of a column ``<name>_column.nc``), ``<name>_history.nc``
        and ``<name>_ladder.nc``.
    fit : pandas.DataFrame
        As in ``<name>_fit.csv``.
    profile : Profile
        The survey behind it.
    arrays : Result
        The same answer without labels.
    advice : tuple of str
        What settings will not do what their user hopes.
    figures : mapping of str to callable
        What draws each figure, as in the files ``figures/<name>_<figure>.png``.
    overlay : Overlay or None
        Known ground near the profile, as in ``<name>_overlay.csv``.
    """

    name: str
    picture: xr.Dataset
    history: xr.Dataset
    ladder: xr.Dataset
    fit: pd.DataFrame
    profile: Profile
    arrays: Result
    advice: tuple[str, ...]
    figures: Mapping[str, Callable[[], Figure]]
    overlay: Overlay | None

    def plot(self, figure: str | None = None) -> Figure:
        """Draws a figure: the answer, or one of `figures` by its name.

        Raises
        ------
        ConfigError
            When there is no figure of that name.
        """
        name = figure or next(iter(self.figures))
        if name not in self.figures:
            raise ConfigError(f"there is no figure '{name}'; there are {', '.join(self.figures)}")
        return self.figures[name]()

    def _repr_html_(self) -> str:
        warnings = (*self.profile.scene.doubts, *self.advice, *self.arrays.remarks)
        return display(self.name, self.arrays, self.plot(), warnings)

    @property
    def verdict(self) -> str:
        """``settled``, ``drifting`` or ``undecided``."""
        return self.arrays.ladder.verdict.word

    def summary(self, files: dict[str, str] | None = None) -> dict[str, Any]:
        """The profile's entry of ``summary.json``."""
        beside = None if self.overlay is None else self.overlay.summary()
        return profile_summary(self.name, self.arrays, files or {}) | {"overlay": beside}

    def __repr__(self) -> str:
        chosen, verdict = self.arrays.chosen, self.arrays.ladder.verdict
        return (
            f"<stillground result '{self.name}': {verdict.word} ({verdict.reason}); "
            f"{chosen.rule} stops at iteration {chosen.iteration:.3g}, misfit {misfit(chosen)}>"
        )


def provenance(profiles: Sequence[Profile], config: Config, text: str, command: str) -> Provenance:
    """What made the files of a run: the configuration, digests of all inputs, versions, time."""
    return Provenance(
        title=config.title,
        config_text=text,
        command=command,
        inputs=digests(path for path in inputs(profiles, config) if path.is_file()),
        versions={name: version(name) for name in _PACKAGES} | {"python": sys.version.split()[0]},
        created=timestamp(),
        cautions="",
    )


def digests(paths: Iterable[Path]) -> dict[str, str]:
    """SHA-256 of files by their names, with the folder's: files of one name may stand in several."""
    return {"/".join(path.parts[-2:]): hashlib.sha256(path.read_bytes()).hexdigest() for path in paths}


def label(
    profile: Profile,
    grids: Sequence[Grid],
    result: Result,
    config: Config,
    origin: Provenance,
    known: Sequence[Known],
) -> ProfileResult:
    """Puts labels, units and coordinates back on an answer, and known ground beside it."""
    advice = advise(profile, grids, config)
    origin = replace(origin, cautions=". ".join([*profile.scene.doubts, *advice]))
    kind = config.kind
    crs = survey_crs(config)
    easting, northing = plan_trace(profile, result.axes, crs)
    surface, tolerance = profile.scene.surface, config.refinement.tolerance
    unit, factor = _table_unit(profile, kind.datum, kind.datum_units)
    picture = picture_dataset(
        profile.name,
        result,
        easting=easting,
        northing=northing,
        crs=crs,
        surface=surface,
        tolerance=tolerance,
        provenance=origin,
        differences=profile.scene.differences,
    )
    beside = None
    if known:
        _, metres = plan_unit(crs)
        beside = overlay(known, picture, kind.ground_property, metres, reach(config))
    return ProfileResult(
        name=profile.name,
        picture=picture,
        history=history_dataset(
            profile.name,
            result,
            options=result.options,
            surface=surface,
            provenance=origin,
        ),
        ladder=ladder_dataset(profile.name, result, surface=surface, tolerance=tolerance, provenance=origin),
        fit=fit_table(
            result,
            rows=row_numbers(profile.survey),
            datum=kind.datum,
            unit=unit,
            si_factor=factor,
            axes=kind.axes,
            positions=profile.scene.positions,
        ),
        profile=profile,
        arrays=result,
        advice=advice,
        figures=figures(
            profile.name,
            result,
            tolerance=tolerance,
            options=result.options,
            surface=surface,
            positions=profile.scene.positions,
            differences=profile.scene.differences,
            known=beside,
            curves=curves_of(
                profile,
                config,
                result.groupings,
                result.observed,
                result.errors,
                predicted=result.predicted,
                weights=result.weights,
            ),
        ),
        overlay=beside,
    )


def curves_of(
    profile: Profile,
    config: Config,
    groupings: Mapping[str, Integers],
    observed: Array,
    errors: Array,
    **answer: Array,
) -> DataCurves | None:
    """A profile's data as curves along its line in the table's unit; None where it has no such line."""
    datum, scene = config.kind.datum, profile.scene
    unit, factor = _table_unit(profile, datum, config.kind.datum_units)
    return data_curves(
        groupings=groupings,
        positions=scene.positions,
        surface=scene.surface,
        datum=datum.replace("_", " "),
        unit=unit,
        si_factor=factor,
        observed=observed,
        errors=errors,
        **answer,
    )


def reach(config: Config) -> float:
    """How far from a line a map shows anything and known ground is taken, m."""
    lengths = config.ground.correlation
    horizontal = lengths.vertical if lengths.horizontal is None else lengths.horizontal
    return config.map.reach or horizontal


def survey_crs(config: Config) -> pyproj.CRS | None:
    """The CRS of the survey, None for a local frame."""
    return None if config.survey.crs is None else pyproj.CRS.from_user_input(config.survey.crs)


def plan_trace(profile: Profile, axes: tuple[Array, ...], crs: pyproj.CRS | None) -> tuple[Array, Array]:
    """East and north of the columns of a grid, in the CRS's unit; a grid of elevations has one column."""
    _, metres = plan_unit(crs)
    easting, northing = profile.scene.trace(axes[0] if len(axes) > 1 else np.zeros(1))
    return np.asarray(easting) / metres, np.asarray(northing) / metres


def _table_unit(profile: Profile, datum: str, si: str) -> tuple[str, float]:
    """The unit of the datum in the survey table, and that unit in SI."""
    unit = str(profile.survey[datum].attrs.get("original_units", si))
    return unit, to_si(1.0, unit, si)
