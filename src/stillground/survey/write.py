"""Survey tables that stillground writes."""

from __future__ import annotations

import csv
import io
from collections.abc import Iterable
from pathlib import Path

import xarray as xr

from stillground.survey.columns import COLUMNS, Column
from stillground.survey.units import to_si
from stillground.whole import whole


def write_table(path: str | Path, ds: xr.Dataset, comments: Iterable[str] = ()) -> None:
    """Write a survey as CSV: the same dataset gives the same bytes, and the file appears whole or not at all.

    Parameters
    ----------
    path : path of the table
    ds : xarray.Dataset
        On the dimension ``datum``, SI; the columns that the vocabulary knows are written in its order,
        lengths in m with 3 decimals, times in ms with 4, conductivities in mS/m with 4, errors with 6,
        values without a unit of their own with 9 significant digits.
    comments : iterable of str
        Lines to stand above the table.

    Raises
    ------
    OutputError
        When the file cannot be written.
    """
    known = [column for name, column in COLUMNS.items() if name in ds]
    text = io.StringIO()
    for comment in comments:
        text.writelines(f"# {line}".rstrip() + "\n" for line in comment.splitlines() or [""])
    table = csv.writer(text, lineterminator="\n")
    table.writerow(f"{c.name} [{c.written[0]}]" if c.dimensional else c.name for c in known)
    table.writerows(zip(*(_cells(ds[c.name], c) for c in known), strict=True))

    with whole(Path(path)) as temporary:
        temporary.write_text(text.getvalue(), encoding="utf-8", newline="\n")


def _cells(variable: xr.DataArray, column: Column) -> list[str]:
    if column.rule == "text":
        return [str(cell) for cell in variable.values]
    unit, decimals = column.written
    if not column.units:
        return [f"{cell:.{decimals}g}" for cell in variable.values]
    if not column.dimensional:
        return [f"{cell:.0f}" for cell in variable.values]
    values = variable.values / to_si(1.0, unit, column.units)
    # Adding zero takes the sign off a rounded -0.
    return [f"{cell:.{decimals}f}" for cell in values.round(decimals) + 0.0]
