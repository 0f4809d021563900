"""``<profile>_overlay.csv``: known ground near the profile, and what the answer says there."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import xarray as xr

from stillground.products.reading import shown, shown_change
from stillground.products.trace import feet
from stillground.products.units import with_unit
from stillground.protocols import Array, GroundProperty, Known
from stillground.whole import whole


@dataclass(frozen=True)
class Overlay:
    """Known ground near one profile.

    Parameters
    ----------
    table : pandas.DataFrame
        One row a point within reach: ``name``, ``x``, ``y``, ``z``, ``distance`` along the profile and
        ``aside`` of it in m, ``known`` and ``found`` in ``units``, ``difference`` (known less found) and
        ``over_error``, the difference over the error bar. NaN where a point has no value, or the answer
        no ground there.
    units : str
        Of the values, as people read them.
    error : str
        Which error bar it is.
    left_out : int
        Points farther from the profile than the reach.
    """

    table: pd.DataFrame
    units: str
    error: str
    left_out: int

    def summary(self) -> dict[str, Any]:
        """For ``summary.json``; None where nothing could be compared."""
        compared = self.table.dropna(subset=["difference"])
        numbers: dict[str, float | None] = dict.fromkeys(("rms_difference", "within_two_errors"))
        if len(compared):
            numbers["rms_difference"] = float(np.sqrt(np.mean(compared["difference"] ** 2)))
            numbers["within_two_errors"] = float(np.mean(compared["over_error"].abs() <= 2))
        counts = {"points": len(self.table), "compared": len(compared), "out_of_reach": self.left_out}
        return counts | {"units": self.units, "error": self.error} | numbers


def overlay_sentence(found: Mapping[str, Any]) -> str:
    """One line for people of `Overlay.summary`."""
    said = f"known ground: {found['points']} points near the profile"
    if found["out_of_reach"]:
        said += f" ({found['out_of_reach']} out of reach)"
    if not found["compared"]:
        return f"{said}, none with a value to compare"
    rms = with_unit(f"{found['rms_difference']:.3g}", found["units"])
    return (
        f"{said}, {found['compared']} compared: root mean square difference "
        f"{rms}, {100 * found['within_two_errors']:.0f} % within "
        f"two error bars ({found['error']})"
    )


def overlay(
    known: Sequence[Known], picture: xr.Dataset, seen: GroundProperty, metres: float, reach: float
) -> Overlay:
    """Sets known ground beside an answer.

    Parameters
    ----------
    known : sequence of Known
    picture : xarray.Dataset
        From `picture_dataset`.
    seen : GroundProperty
    metres : float
        One unit of its easting and northing, m.
    reach : float
        How far from the profile points are taken, m; none beyond its ends.
    """
    points = np.vstack([np.empty((0, 3)), *(one.points for one in known)])
    values = np.concatenate([np.empty(0), *(one.values for one in known)])
    names = np.array([name for one in known for name in one.names], dtype=object)
    plan = [metres * np.atleast_1d(picture[axis].to_numpy()) for axis in ("easting", "northing")]
    near, place, aside = feet(np.column_stack(plan), points[:, :2], reach)
    distance = np.zeros(near.size)
    if "distance" in picture.dims:
        along = picture["distance"].to_numpy()
        distance = np.interp(place, np.arange(along.size), along)
    kind = "total_error" if f"{seen.name}_total_error" in picture else "noise_part"
    found, error = (
        _at(picture[name], distance, points[near, 2]) for name in (seen.name, f"{seen.name}_{kind}")
    )
    answer, given = (shown(seen, numbers)[0] for numbers in (found, values[near]))
    table = pd.DataFrame(
        {
            "name": names[near],
            **{axis: points[near, i] for i, axis in enumerate("xyz")},
            "distance": distance,
            "aside": aside,
            "known": given,
            "found": answer,
            "difference": given - answer,
            "over_error": (given - answer) / shown_change(seen, found, error),
        }
    )
    said = "total error" if kind == "total_error" else "noise part alone, which is not all of the error"
    return Overlay(table, shown(seen, found)[2], said, len(points) - near.size)


def write_overlay(folder: Path, name: str, beside: Overlay) -> Path:
    """Write ``<name>_overlay.csv`` into ``folder``, units in the header; `OutputError` where it cannot be."""
    path = folder / f"{name}_overlay.csv"
    metres = dict.fromkeys(("x", "y", "z", "distance", "aside"), "m")
    units = metres | dict.fromkeys(("known", "found", "difference"), beside.units)
    table = beside.table.rename(columns={column: f"{column} [{unit}]" for column, unit in units.items()})
    with whole(path) as temporary:
        table.to_csv(temporary, index=False, float_format="%.7g", lineterminator="\n", encoding="utf-8")
    return path


def _at(field: xr.DataArray, distance: Array, elevation: Array) -> Array:
    """The field at points, NaN outside it."""
    at = {"elevation": xr.DataArray(elevation, dims="point")}
    if "distance" in field.dims:
        at["distance"] = xr.DataArray(distance, dims="point")
    return np.asarray(field.interp(at).to_numpy(), dtype=np.float64)
