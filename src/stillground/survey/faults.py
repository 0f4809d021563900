"""How the faults of a table are worded: one sentence for each column and each thing wrong in it."""

from __future__ import annotations

import re
from collections.abc import Iterable, Mapping
from typing import Final

import numpy as np
import xarray as xr

from stillground.protocols import Integers
from stillground.survey.units import to_si

LISTED: Final = 20

_DECIMAL_COMMA = re.compile(r"[+-]?\d+,\d+")


def list_rows(found: Iterable[tuple[int, str]]) -> str:
    """Rows with what they hold, the first ``LISTED`` by name and the rest counted.

    Examples
    --------
    >>> list_rows([(4, "0 ms"), (9, "")])
    'row 4 (0 ms), row 9'
    """
    items = [f"row {row} ({shown})" if shown else f"row {row}" for row, shown in found]
    more = f" and {len(items) - LISTED} more" if len(items) > LISTED else ""
    return ", ".join(items[:LISTED]) + more


def label(variable: xr.DataArray) -> str:
    """The column as the table heads it, with our name where that is another."""
    name, header = str(variable.name), variable.attrs.get("original_name")
    return f"column {header} ({name})" if header and header != name else f"column {name}"


def shown(value: float, variable: xr.DataArray) -> str:
    """A value in the unit of the table."""
    unit, si = variable.attrs.get("original_units"), variable.attrs.get("units")
    if unit and si:
        return f"{value / to_si(1.0, unit, si):.10g} {unit}"
    return f"{value:.10g}"


def unreadable(variable: xr.DataArray, rows: Integers) -> list[str]:
    """The fault that cells of a number column are no numbers, if any of these rows has one."""
    texts: Mapping[int, str] = variable.attrs.get("unreadable", {})
    found = [(int(row), f"'{texts[row]}'") for row in rows.tolist() if row in texts]
    if not found:
        return []
    advice = ""
    if any(_DECIMAL_COMMA.fullmatch(texts[row]) for row, _ in found):
        advice += "; write decimals with a point, like 1.5"
    if any("#" in texts[row] for row, _ in found):
        advice += "; a comment needs a line of its own"
    return [f"{label(variable)} must hold numbers: {list_rows(found)}{advice}"]


def where(variable: xr.DataArray, bad: np.ndarray, rows: Integers, must: str) -> list[str]:
    """The fault that a column breaks a rule in the rows that ``bad`` marks, if any."""
    if not bad.any():
        return []
    values = variable.values[bad]
    texts = ["" if np.isnan(value) else shown(value, variable) for value in values]
    return [f"{label(variable)} must {must}: {list_rows(zip(rows[bad].tolist(), texts, strict=True))}"]


def row_numbers(ds: xr.Dataset) -> Integers:
    """Where each datum stands in its table; counted from 1 for a dataset made in memory."""
    if "row" in ds.coords:
        return np.asarray(ds["row"].values, dtype=np.int64)
    return np.arange(1, ds.sizes["datum"] + 1, dtype=np.int64)


def source_of(ds: xr.Dataset) -> str:
    """The file, or file and line, that a dataset came from."""
    return str(ds.attrs.get("source", "survey"))
