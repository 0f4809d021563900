"""A section of velocity from an earlier run, laid along a line that is reconstructed anew."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import xarray as xr

from stillground.errors import SurveyError
from stillground.protocols import Array
from stillground.survey.plane import Section
from stillground.survey.units import to_si

_NEEDED = ("elevation", "easting", "northing", "velocity")
_IN_SI = ("m", "m", "m", "m s-1")


def read_earlier_section(path: Path, section: Section, corridor: float) -> tuple[Array, Array, Array]:
    """Read the velocity in a file ``<profile>_section.nc``, of this line or one along it, either way round.

    Parameters
    ----------
    path : path of the file
    section : Section
    corridor : float
        How far off the section the earlier one may lie, m.

    Returns
    -------
    distance, elevation : array, shape (n_distance,) and (n_elevation,), m
        Both ascending, along ``section``.
    velocity : array, shape (n_distance, n_elevation), m/s
        Above the ground that of the highest node in it.

    Raises
    ------
    SurveyError
        When it is no such file, or its section lies off this one or does not cover it.
    """
    try:
        with xr.open_dataset(path, engine="netcdf4") as file:
            missing = [name for name in _NEEDED if name not in file.variables]
            if missing:
                raise ValueError(
                    f"has no variable {', '.join(missing)}; give a <profile>_section.nc of a run"
                )
            taken = file[list(_NEEDED)].load().sortby("elevation").transpose("distance", "elevation")
        elevation, easting, northing, values = (
            to_si(taken[name].to_numpy().astype(np.float64), taken[name].attrs.get("units", si), si)
            for name, si in zip(_NEEDED, _IN_SI, strict=True)
        )
    except (OSError, ValueError) as error:
        raise SurveyError(str(path), [f"cannot be read as the section of a run: {error}"]) from error
    known = np.isfinite(values)
    highest = np.maximum.accumulate(np.where(known, np.arange(values.shape[1]), 0), axis=1)
    values = np.take_along_axis(values, highest, axis=1)
    if not (values > 0).all():
        raise SurveyError(str(path), ["its velocity is not above zero everywhere in the ground"])
    distance = section.along(easting, northing)
    aside = np.abs(section.across(easting, northing)).max()
    reach = distance.min(), distance.max()
    open_ends = max(reach[0], section.length - reach[1])
    if aside > corridor or open_ends > corridor:
        raise SurveyError(
            str(path),
            [
                f"is of another line: its section lies up to {aside:.4g} m off this one, and along it from "
                f"{reach[0]:.4g} to {reach[1]:.4g} m where this goes from 0 to {section.length:.4g} m; "
                f"give one along this line, in the same coordinates"
            ],
        )
    order = np.argsort(distance)
    return distance[order], elevation, values[order]
