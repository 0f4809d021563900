"""From a file to a labelled dataset in SI, and from a dataset to its profiles."""

from __future__ import annotations

import re
from collections import defaultdict
from collections.abc import Collection, Iterable, Mapping, Sequence
from difflib import get_close_matches
from pathlib import Path
from types import MappingProxyType
from typing import Any, Final

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from stillground.errors import SurveyError
from stillground.protocols import Array, Integers
from stillground.survey.columns import COLUMNS, Column, column, needed, optional
from stillground.survey.faults import source_of, unreadable
from stillground.survey.table import RawColumn, open_table, split_header
from stillground.survey.units import to_si

_NOTHING: Final[Mapping[str, str]] = MappingProxyType({})
_OWN = ("datum", "row", "entry")


def read(
    path: str | Path,
    *,
    columns: Mapping[str, str] = _NOTHING,
    units: Mapping[str, str] = _NOTHING,
    expected: Sequence[str] | None = None,
    leave_out: Collection[str] = (),
) -> xr.Dataset:
    """Read a survey table, CSV or NetCDF.

    Parameters
    ----------
    path : path of the table
    columns : mapping, our name to the table's
    units : mapping, our name to its unit, for columns whose heading has none
    expected : sequence of str, optional
        Columns that the kind of survey needs. Its other columns are then left out and named in the
        attribute ``ignored_columns``, and faults of columns and cells are handed on to ``check``, which
        tells them together with its own. Without it everything in the table is taken, and faults raise.
    leave_out : collection of str
        Columns to leave out, faulty or not.

    Returns
    -------
    xarray.Dataset
        On the dimension ``datum``, SI inside, with the coordinate ``row``: the line of the file as an
        editor numbers it, from 1 (in NetCDF the index from 1), and ``entry``: its place among the data of
        the file, from 0, of as many as the attribute ``of`` says. Columns that the vocabulary does not
        know stand as they are, with the unit of their heading.

    Raises
    ------
    SurveyError
        When the file is no table; without ``expected`` also for faults of columns and cells.
    """
    raw = open_table(path)
    theirs = {name: split_header(header)[0] for name, header in columns.items()}
    by_header: defaultdict[str, list[RawColumn]] = defaultdict(list)
    for each in raw.columns:
        by_header[each.header].append(each)

    if expected is None:
        required = (*theirs, *(header for header in by_header if header not in theirs.values()))
        wanted = required
    else:
        required = needed(expected)
        wanted = (*required, *optional(expected))
    names = [name for name in dict.fromkeys(wanted) if name not in leave_out and name not in _OWN]
    ignored = [header for header in by_header if header not in {theirs.get(name, name) for name in names}]

    faults = _unknown_names(columns, units, (*names, *leave_out))
    variables: dict[str, tuple[str, NDArray[Any], dict[str, Any]]] = {}
    for name in names:
        header = theirs.get(name, name)
        found = by_header.get(header, [])
        if len(found) == 1:
            known = column(name)
            # A column that nobody knows is text as soon as one cell is.
            stranger = expected is None and name not in COLUMNS
            text = known.rule == "text" or (stranger and bool(numbers_of(found[0].cells)[1]))
            unit, fault = _unit(found[0], known, units.get(name))
            variables[name] = _variable(found[0], known, unit, raw.rows, text)
            if fault:
                faults[name] = fault
        elif found:
            faults[name] = f"{len(found)} columns are headed '{header}'; keep one"
        elif fault := _missing(name, header, name in required or name in columns, ignored, by_header):
            faults[name] = fault

    ds = xr.Dataset(
        variables,
        coords={
            "row": ("datum", raw.rows, {"long_name": "row of the table", "units": "1"}),
            "entry": (
                "datum",
                np.arange(raw.rows.size),
                {"long_name": "place among the data of the table, from 0", "units": "1", "of": raw.rows.size},
            ),
        },
        attrs={"source": str(path), "ignored_columns": ignored},
    )
    if expected is not None:
        return ds.assign_attrs(column_faults=faults) if faults else ds
    on = raw.rows[ds["use"].values != 0] if "use" in ds else raw.rows
    wrong = [*faults.values(), *(fault for v in ds.data_vars.values() for fault in unreadable(v, on))]
    if wrong:
        raise SurveyError(str(path), wrong)
    for variable in ds.data_vars.values():
        variable.attrs.pop("unreadable", None)
    return ds


def _unknown_names(
    columns: Mapping[str, str], units: Mapping[str, str], names: Collection[str]
) -> dict[str, str]:
    faults = {}
    for setting, keys in (("columns", columns), ("units", units)):
        for key in keys:
            if key not in names and key not in COLUMNS:
                near = get_close_matches(key, names, n=1)
                advice = f"did you mean '{near[0]}'?" if near else f"it has {', '.join(names)}"
                faults[key] = f"survey.{setting} names '{key}', which is no column of this survey; {advice}"
    return faults


def _missing(
    name: str, header: str, required: bool, ignored: Sequence[str], present: Iterable[str]
) -> str | None:
    """What to say of a column that is not there; None where nobody misses it."""
    if header != name:
        return f"column {header} ({name}) is missing; the table has {', '.join(present)}"
    strangers = {each.casefold(): each for each in ignored if each not in COLUMNS}
    near = get_close_matches(name, strangers, n=1, cutoff=0.6 if required else 0.8)
    # ``line`` and ``use`` resemble too many words of other meaning.
    if near and (required or name not in ("line", "use")):
        other = strangers[near[0]]
        return (
            f"column {name} is missing; did you mean '{other}'? "
            f'Then set columns = {{ {name} = "{other}" }} in [survey] or rename it'
        )
    if required:
        return f"column {name} is missing; the table has {', '.join(present)}"
    return None


def _unit(raw: RawColumn, known: Column, given: str | None) -> tuple[str | None, str | None]:
    """The unit to convert from, and what is wrong with it."""
    unit = given or raw.unit
    if not known.dimensional:
        return unit, None
    name = f"column {raw.header}" + ("" if raw.header == known.name else f" ({known.name})")
    example = known.written[0]
    if unit is None:
        return None, (
            f"{name} has no unit; head it '{raw.header} [{example}]' "
            f'or set units = {{ {known.name} = "{example}" }} in [survey]'
        )
    try:
        factor = to_si(1.0, unit, known.units)
        if raw.unit and to_si(1.0, raw.unit, known.units) != factor:
            return None, (
                f"{name} is in '{raw.unit}' by its heading and in '{given}' by survey.units; "
                f"keep the right one"
            )
    except ValueError as error:
        return None, f"{name}: {error}; give a unit like '{example}'"
    return unit, None


def _variable(
    raw: RawColumn, known: Column, unit: str | None, rows: Integers, text: bool
) -> tuple[str, NDArray[Any], dict[str, Any]]:
    attributes: dict[str, Any] = {"long_name": known.long_name}
    if known.units or unit:
        attributes["units"] = known.units or unit
    if raw.header != known.name:
        attributes["original_name"] = raw.header
    if text:
        return "datum", _texts(raw.cells), attributes
    values, texts = numbers_of(raw.cells)
    if known.dimensional and unit:
        attributes["original_units"] = unit
        values = to_si(values, unit, known.units)
    if texts:
        attributes["unreadable"] = {int(rows[index]): text for index, text in texts.items()}
    return "datum", values, attributes


def numbers_of(cells: NDArray[Any]) -> tuple[Array, dict[int, str]]:
    """Numbers, NaN for empty cells and for text, and the text by its index."""
    if cells.dtype.kind in "biuf":
        return cells.astype(np.float64), {}
    values = np.full(cells.shape, np.nan)
    texts = {}
    for index, cell in enumerate(_texts(cells)):
        try:
            # Python reads 1_000 as a number; no table means that.
            values[index] = float(cell.replace("_", "?") or "nan")
        except ValueError:
            texts[index] = str(cell)
    return values, texts


def _texts(cells: NDArray[Any]) -> NDArray[np.str_]:
    def written(cell: Any) -> str:
        if isinstance(cell, bytes):
            return cell.decode("utf-8", "replace").strip()
        return f"{cell:g}" if isinstance(cell, float) else str(cell).strip()

    return cells if cells.dtype.kind == "U" else np.array([written(cell) for cell in cells], dtype=np.str_)


def profiles(ds: xr.Dataset, stem: str) -> dict[str, xr.Dataset]:
    """Split a survey by its column ``line``.

    Parameters
    ----------
    ds : xarray.Dataset
        On the dimension ``datum``, as ``read`` or ``check`` returns it.
    stem : str
        Name of the file without folder and ending.

    Returns
    -------
    dict of str to xarray.Dataset
        ``{stem: ds}`` where no row names a line, else one dataset for each line, in the order of the
        table, named ``<stem>-<line>`` with characters that a file name cannot hold replaced by ``_``.

    Raises
    ------
    SurveyError
        When two lines come to the same name.
    """
    if "line" not in ds or not (ds["line"] != "").any():
        return {stem: ds}
    lines = list(dict.fromkeys(ds["line"].values.tolist()))
    split: dict[str, xr.Dataset] = {}
    for line in lines:
        name = stem + "-" + re.sub(r"[^\w.+-]+", "_", str(line))
        if name in split:
            raise SurveyError(
                source_of(ds), [f"column line: '{line}' and another line both give the name {name}"]
            )
        profile = ds.isel(datum=np.flatnonzero(ds["line"].values == line))
        split[name] = profile.assign_attrs(source=f"{source_of(ds)}, line {line}")
    return split
