"""Known ground at points, such as layers or a borehole's log, to set beside an answer."""

from __future__ import annotations

from pathlib import Path

import numpy as np

from stillground.errors import SurveyError
from stillground.protocols import Array, GroundProperty, Known
from stillground.survey.read import read
from stillground.survey.units import to_si


def read_known(path: str | Path, seen: GroundProperty) -> Known:
    """Read a table with the columns ``x``, ``y``, ``z``, and ``value`` and ``name`` where it has them.

    Parameters
    ----------
    path : path of the table, CSV or NetCDF
    seen : GroundProperty
        What ``value`` is of; its heading has a unit of that, or of the reciprocal that people read.

    Raises
    ------
    SurveyError
        With the faults of the table.
    """
    table = read(path)
    missing = [axis for axis in "xyz" if axis not in table]
    if missing:
        raise SurveyError(
            str(path),
            [f"column {', '.join(missing)} is missing; give x, y, z, and value and name where known"],
        )
    rows = np.flatnonzero(table["use"].values != 0) if "use" in table else np.arange(table.sizes["datum"])
    table = table.isel(datum=rows)
    points = np.column_stack([table[axis].values for axis in "xyz"])
    values = np.full(len(points), np.nan)
    if "value" in table:
        values = _in_si(str(path), table["value"].values, table["value"].attrs.get("units"), seen)
    faults = []
    empty = table["row"].values[~np.isfinite(points).all(axis=1)]
    if empty.size:
        faults.append(f"x, y or z is empty in row {', '.join(map(str, empty[:5]))}; give all three")
    low = table["row"].values[values <= 0]
    if seen.reciprocal is not None and low.size:
        faults.append(f"value is not above zero in row {', '.join(map(str, low[:5]))}; leave it empty there")
    if faults:
        raise SurveyError(str(path), faults)
    names = table["name"].values if "name" in table else np.full(len(points), "")
    return Known(points, values, tuple(n if isinstance(n, str) else f"{n:g}" for n in names.tolist()))


def _in_si(path: str, values: Array, unit: str | None, seen: GroundProperty) -> Array:
    if unit is None and seen.units != "1":
        example = seen.units if seen.reciprocal is None else seen.reciprocal[1]
        raise SurveyError(path, [f"column value has no unit; head it 'value [{example}]'"])
    try:
        return to_si(values, unit or "1", seen.units)
    except ValueError as error:
        if seen.reciprocal is None:
            raise SurveyError(path, [f"column value: {error}"]) from None
    try:
        with np.errstate(divide="ignore"):
            return np.asarray(1 / to_si(values, unit or "1", seen.reciprocal[1]))
    except ValueError as error:
        raise SurveyError(path, [f"column value: {error}"]) from None
