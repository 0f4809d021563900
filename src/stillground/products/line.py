"""One profile as the files of a whole run need it: its picture, its extent, what stands along it."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np
import pandas as pd
import xarray as xr

from stillground.protocols import Array


@dataclass(frozen=True)
class Line:
    """A profile among others.

    Parameters
    ----------
    name : str
    picture : xarray.Dataset
        As in ``<name>_section.nc`` or ``<name>_column.nc``; a column stands at one place in plan.
    first, last : float
        Distances of the outermost positions along it, m.
    top : float
        Elevation of the highest position, m: depth counts from there where no surface is known.
    stations : pandas.DataFrame
        One row a position: ``what`` stands there, its ``number`` from 1, ``x``, ``y``, ``z`` in m,
        ``data`` (how many it has part in), their mean ``residual`` over error and mean ``weight``, and
        its ``static``, NaN where none was fitted.
    rays : tuple of array, shape (n_nodes, 2)
        Distance and elevation along the ray of each datum, where rays bend with the ground.
    fit : pandas.DataFrame
        As in ``<name>_fit.csv``, one row a datum.
    """

    name: str
    picture: xr.Dataset
    first: float
    last: float
    top: float
    stations: pd.DataFrame
    rays: tuple[Array, ...] = ()
    fit: pd.DataFrame = field(default_factory=pd.DataFrame)

    @property
    def trace(self) -> Array:
        """East and north of the section's columns, shape (n_columns, 2), in the CRS's unit."""
        plan = (np.atleast_1d(self.picture[name].to_numpy()) for name in ("easting", "northing"))
        return np.column_stack(list(plan))


def answers(section: xr.Dataset) -> tuple[str, ...]:
    """Names of the ground property in a section and of its reciprocal, where it has one."""
    return tuple(
        str(name)
        for name, variable in section.data_vars.items()
        if variable.attrs.get("coverage_content_type") == "modelResult"
    )


def errors(sections: Sequence[xr.Dataset]) -> tuple[str, ...]:
    """Names of the errors of the ground property that all sections hold."""
    seen = answers(sections[0])[0]
    return tuple(
        name
        for name in (f"{seen}_noise_part", f"{seen}_total_error")
        if all(name in section for section in sections)
    )
