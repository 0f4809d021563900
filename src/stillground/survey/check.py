"""Whether a survey can be used: all faults at once, or the usable rows and what to know of them."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
import pandas as pd
import xarray as xr
from numpy.typing import NDArray

from stillground.errors import SurveyError
from stillground.protocols import Array
from stillground.survey.columns import column, error_of, needed, optional
from stillground.survey.faults import label, list_rows, row_numbers, source_of, unreadable, where

# Outliers are called so past 5 robust standard deviations; 1.4826 turns the median absolute
# deviation of a normal distribution into its standard deviation (Hampel 1974).
_DEVIATION, _SUSPICIOUS = 1.4826, 5.0
_SAME_PLACE = 1e-6


@dataclass(frozen=True)
class SurveyReport:
    """What to know of a survey that can be used; rows as its table numbers them.

    Parameters
    ----------
    source : str
    rows, used : int
        Rows of the table, and those that ``use`` leaves on.
    repeated : tuple of tuple of int
        Groups of rows of one line that measure the same thing again.
    suspicious : tuple of (int, float)
        Rows whose time over straight distance (s m-1, given) lies more than 5 robust standard
        deviations off the median of their line, and one or more beyond the rest of it: ground that grows
        faster downwards has a tail, without a gap.
    ranges : mapping of str to (float, float)
        Smallest and largest value of each number column, SI.
    errors : str
        Where the standard deviations come from.
    ignored_columns : tuple of str
        Columns of the table that the survey has no use for.
    """

    source: str
    rows: int
    used: int
    repeated: tuple[tuple[int, ...], ...]
    suspicious: tuple[tuple[int, float], ...]
    ranges: Mapping[str, tuple[float, float]]
    errors: str
    ignored_columns: tuple[str, ...]

    @property
    def switched_off(self) -> int:
        """Rows left out by ``use``."""
        return self.rows - self.used


def check(
    ds: xr.Dataset,
    *,
    datum: str,
    expected: Sequence[str],
    floor: float | None = None,
    relative: float | None = None,
) -> tuple[xr.Dataset, SurveyReport]:
    """Refuse a survey with all its faults, or return its usable rows.

    Parameters
    ----------
    ds : xarray.Dataset
        As ``read`` returns it, on the dimension ``datum``.
    datum : str
        Name of the measured column, such as ``time``.
    expected : sequence of str
        Columns that the kind of survey needs.
    floor : float, optional
        Smallest standard deviation of a datum, in its SI unit, where the table has none.
    relative : float, optional
        Standard deviation as a share of the datum; with ``floor`` the root of the sum of squares.

    Returns
    -------
    xarray.Dataset
        The rows in use, with ``<datum>_error``, without ``use``.
    SurveyReport

    Raises
    ------
    SurveyError
        With all faults of columns, cells, geometry and errors.
    """
    names = {*needed(expected), *optional(expected)}
    strangers = [str(name) for name in ds.data_vars if name not in names]
    kept, faults = usable(ds.drop_vars(strangers), expected)
    error = error_of(datum)
    origin = "given by the table"
    if error in kept and not (floor is None and relative is None):
        origin += ", and [errors] has no effect"
    absent = error not in kept and error not in ds.attrs.get("column_faults", {})
    if absent and floor is None and relative is None:
        faults.append(
            f"column {error} is missing and [errors] does not make it: give errors.floor "
            f"(a standard deviation with its unit) or errors.relative (a share, like 0.01), or the column"
        )
    elif absent and datum in kept:
        parts = {"floor": floor, "relative": relative}
        origin = "made from " + " and ".join(name for name, value in parts.items() if value is not None)
        kept = kept.assign({error: _made(kept[datum], error, floor or 0.0, relative or 0.0)})
        zero = kept[error].values == 0
        faults += where(kept[datum], zero, row_numbers(kept), "have an error above zero; set errors.floor")
    faults += _same_place(kept) + _too_few(kept)
    if faults:
        raise SurveyError(source_of(ds), faults)

    report = SurveyReport(
        source=source_of(ds),
        rows=ds.sizes["datum"],
        used=kept.sizes["datum"],
        repeated=_repeated(kept, [n for n in needed(expected) if n != datum]),
        suspicious=_suspicious(kept),
        ranges={
            str(name): (float(v.min()), float(v.max()))
            for name, v in kept.data_vars.items()
            if v.dtype.kind == "f"
        },
        errors=origin,
        ignored_columns=(*ds.attrs.get("ignored_columns", ()), *strangers),
    )
    return kept, report


def usable(ds: xr.Dataset, expected: Sequence[str]) -> tuple[xr.Dataset, list[str]]:
    """The rows in use, without ``use``, and what is wrong with columns and cells that they need."""
    faults = dict(ds.attrs.get("column_faults", {}))
    for name in needed(expected):
        if name not in ds:
            faults.setdefault(name, f"column {name} is missing")
    told = list(faults.values())
    if "use" in ds:
        told += _cell_faults(ds["use"], ds)
        ds = ds.isel(datum=np.flatnonzero(ds["use"].values != 0)).drop_vars("use")
    kept = ds.copy()
    for variable in ds.data_vars.values():
        told += _cell_faults(variable, ds)
        kept[variable.name].attrs.pop("unreadable", None)
    return kept, told


def _cell_faults(variable: xr.DataArray, ds: xr.Dataset) -> list[str]:
    rule = column(str(variable.name)).rule
    rows = row_numbers(ds)
    if rule == "text":
        empty = variable.values == ""
        # A column ``line`` that nobody filled in is none.
        if not empty.any() or (variable.name == "line" and empty.all()):
            return []
        return [
            f"{label(variable)} must not be empty: {list_rows((row, '') for row in rows[empty].tolist())}"
        ]
    values = variable.values
    texts = np.isin(rows, list(variable.attrs.get("unreadable", {})))
    faults = unreadable(variable, rows)
    faults += where(variable, np.isnan(values) & ~texts, rows, "not be empty or NaN")
    faults += where(variable, np.isinf(values), rows, "be finite")
    if rule == "positive":
        faults += where(variable, (values <= 0) & np.isfinite(values), rows, "be positive")
    elif rule == "not negative":
        faults += where(variable, (values < 0) & np.isfinite(values), rows, "not be negative")
    elif rule == "0 or 1":
        faults += where(variable, np.isfinite(values) & ~np.isin(values, (0, 1)), rows, "be 0 or 1")
    return faults


def _made(datum: xr.DataArray, error: str, floor: float, relative: float) -> xr.DataArray:
    known = column(error)
    units = known.units or datum.attrs.get("units", "")
    attributes = {"long_name": known.long_name} | ({"units": units} if units else {})
    if "original_units" in datum.attrs:
        attributes["original_units"] = datum.attrs["original_units"]
    return xr.DataArray(np.hypot(floor, relative * datum.values), dims="datum", attrs=attributes)


def _positions(ds: xr.Dataset, end: str) -> Array | None:
    names = [f"{end}_{axis}" for axis in "xyz"]
    if any(name not in ds for name in names):
        return None
    return np.stack([ds[name].values for name in names], axis=1)


def _distances(ds: xr.Dataset) -> Array | None:
    source, receiver = _positions(ds, "source"), _positions(ds, "receiver")
    return None if source is None or receiver is None else np.linalg.norm(receiver - source, axis=1)


def _same_place(ds: xr.Dataset) -> list[str]:
    distances = _distances(ds)
    if distances is None or not (same := distances < _SAME_PLACE).any():
        return []
    found = [
        (row, f"both at {x:.10g}, {y:.10g}, {z:.10g} m")
        for row, (x, y, z) in zip(
            row_numbers(ds)[same].tolist(),
            np.stack([ds[f"source_{axis}"].values[same] for axis in "xyz"], axis=1),
            strict=True,
        )
    ]
    return [f"source and receiver must be apart: {list_rows(found)}; mend them or set use to 0"]


def _lines(ds: xr.Dataset) -> dict[str, np.ndarray]:
    """Indices of the rows of each line; one line named "" where there are none."""
    if "line" not in ds:
        return {"": np.arange(ds.sizes["datum"])}
    values = ds["line"].values
    return {line: np.flatnonzero(values == line) for line in dict.fromkeys(values.tolist())}


def _too_few(ds: xr.Dataset) -> list[str]:
    counts = {line: rows.size for line, rows in _lines(ds).items()} or {"": 0}
    if len(counts) > 1:
        counts.pop("", None)  # told as empty cells of the column
    return [
        (f"line {line} has " if line else "it has ")
        + ("only 1 row" if count else "no row")
        + " in use; a profile needs two or more"
        for line, count in counts.items()
        if count < 2
    ]


def _repeated(ds: xr.Dataset, geometry: Sequence[str]) -> tuple[tuple[int, ...], ...]:
    if not geometry:
        return ()
    keys = [*geometry, *(["line"] if "line" in ds else [])]
    table = pd.DataFrame({key: ds[key].values for key in keys})
    rows = row_numbers(ds)
    groups = table.groupby(keys, sort=False).indices.values()
    return tuple(sorted(tuple(rows[group].tolist()) for group in groups if len(group) > 1))


def _suspicious(ds: xr.Dataset) -> tuple[tuple[int, float], ...]:
    distances = _distances(ds)
    if distances is None or "time" not in ds:
        return ()
    slowness = ds["time"].values / distances
    found: list[tuple[int, float]] = []
    for group in _lines(ds).values():
        middle = np.median(slowness[group])
        away = slowness[group] - middle
        # Times of uniform ground may agree to the last digit but one.
        deviation = max(_DEVIATION * np.median(np.abs(away)), 1e-9 / _SUSPICIOUS * middle)
        rows = group[_apart(away / deviation) | _apart(-away / deviation)]
        found += zip(row_numbers(ds)[rows].tolist(), slowness[rows].tolist(), strict=True)
    return tuple(sorted(found))


def _apart(away: Array) -> NDArray[np.bool_]:
    """Which values lie past the limit and past a gap of one from all that are smaller."""
    order = np.sort(away)
    gaps = np.flatnonzero((order[1:] > _SUSPICIOUS) & (np.diff(order) > 1))
    return away >= order[gaps[0] + 1] if gaps.size else np.zeros(away.shape, dtype=bool)
