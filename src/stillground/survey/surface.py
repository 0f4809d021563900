"""The ground surface along a section."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from types import MappingProxyType
from typing import Final

import numpy as np

from stillground.errors import SurveyError
from stillground.protocols import Array
from stillground.survey.check import usable
from stillground.survey.plane import Section
from stillground.survey.read import read

_NOTHING: Final[Mapping[str, str]] = MappingProxyType({})
_EXPECTED = ("x", "y", "z")


def read_surface(
    path: str | Path,
    section: Section,
    corridor: float,
    *,
    columns: Mapping[str, str] = _NOTHING,
    units: Mapping[str, str] = _NOTHING,
) -> tuple[Array, Array]:
    """Read points of the ground surface, columns ``x``, ``y``, ``z``, and project them on a section.

    Parameters
    ----------
    path : path of the table, CSV or NetCDF
    section : Section
    corridor : float
        How far off the section points may lie to be taken, m.
    columns, units : mapping
        As in ``read``.

    Returns
    -------
    distance, elevation : array, shape (n_points,), m
        By ascending distance along the section.

    Raises
    ------
    SurveyError
        With all faults of the table, fewer than two points among them, or when the points
        do not reach the section.
    """
    points, faults = usable(read(path, columns=columns, units=units, expected=_EXPECTED), _EXPECTED)
    if points.sizes["datum"] < 2:
        faults.append(f"a surface needs two points or more; it has {points.sizes['datum']}")
    if faults:
        raise SurveyError(str(path), faults)
    aside = np.abs(section.across(points["x"].values, points["y"].values))
    points = points.isel(datum=np.flatnonzero(aside <= corridor))
    if points.sizes["datum"] < 2:
        raise SurveyError(
            str(path),
            [
                f"{points.sizes['datum']} of its points lie within {corridor:.3g} m of the section, "
                f"the nearest {aside.min():.4g} m off it; give two or more points along the profile, "
                f"in the coordinates of the survey"
            ],
        )
    distance = section.along(points["x"].values, points["y"].values)
    if distance.max() < 0 or distance.min() > section.length:
        raise SurveyError(
            str(path),
            [
                f"its points lie {distance.min():.4g} to {distance.max():.4g} m along a section of 0 to "
                f"{section.length:.4g} m; give points along the profile, in the coordinates of the survey"
            ],
        )
    order = np.argsort(distance, kind="stable")
    return distance[order], points["z"].values[order]
