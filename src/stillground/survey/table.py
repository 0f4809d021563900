"""What a file holds, before names and units mean anything."""

from __future__ import annotations

import csv
import io
import re
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from stillground.errors import SurveyError
from stillground.protocols import Integers
from stillground.survey.faults import list_rows

_NETCDF = (b"CDF\x01", b"CDF\x02", b"CDF\x05", b"\x89HDF")
_HEADER = re.compile(r"(.*?)\s*(?:\[([^\]]*)\])?", re.DOTALL)


@dataclass(frozen=True)
class RawColumn:
    """A column as it stands: its heading, its unit if the file gives one, its cells."""

    header: str
    unit: str | None
    cells: NDArray[Any]


@dataclass(frozen=True)
class RawTable:
    """All columns of a file; ``rows`` says where each row stands in it, from 1."""

    columns: tuple[RawColumn, ...]
    rows: Integers


def split_header(text: str) -> tuple[str, str | None]:
    """Take the unit in brackets off a heading.

    Examples
    --------
    >>> split_header("time [ms]")
    ('time', 'ms')
    >>> split_header("line")
    ('line', None)
    """
    match = _HEADER.fullmatch(text.strip())
    assert match is not None  # every text matches: the name takes what is no unit
    return match[1].strip(), (match[2] or "").strip() or None


def open_table(path: str | Path, *, numbers: bool = False) -> RawTable:
    """Read a CSV or NetCDF file; its first bytes tell which. With ``numbers`` the headings may be numbers.

    Raises
    ------
    SurveyError
        When there is no such file, or it holds no table; broken rows are all named at once.
    """
    source = str(path)
    if is_netcdf(path):
        return _netcdf(source)
    return _csv(source, Path(path).read_bytes(), numbers)


def is_netcdf(path: str | Path) -> bool:
    """Whether a file's first bytes are those of NetCDF.

    Raises
    ------
    SurveyError
        When there is no such file, or it cannot be read.
    """
    try:
        with Path(path).open("rb") as file:
            return file.read(4) in _NETCDF
    except FileNotFoundError as error:
        raise SurveyError(str(path), ["there is no such file"]) from error
    except OSError as error:
        raise SurveyError(str(path), [f"cannot be read: {error.strerror}"]) from error


def require_file(path: Path, key: str) -> None:
    """Refuse a setting that names a file which is not there, or a folder.

    Parameters
    ----------
    path : Path
    key : str
        Of the setting, whose paths are relative to the configuration.

    Raises
    ------
    SurveyError
    """
    if not path.is_file():
        wrong = "is a folder, no table" if path.is_dir() else "there is no such file"
        raise SurveyError(
            str(path), [f"{wrong} ({path.resolve()}); mend {key}, relative to the configuration"]
        )


def _csv(source: str, content: bytes, numbers: bool) -> RawTable:
    lines = _lines(source, content)
    first = next(lines, None)
    if first is None:
        raise SurveyError(source, ["holds no table; the first line should name the columns"])
    separator = max((",", ";", "\t"), key=first[1].count)

    def cells(line: str) -> list[str]:
        row = next(csv.reader([line], delimiter=separator, skipinitialspace=True, strict=True))
        return [cell.strip() for cell in row]

    try:
        headers = [split_header(cell) for cell in cells(first[1])]
    except csv.Error as error:
        raise SurveyError(source, [f"the header (row {first[0]}) is broken: {error}"]) from error
    # Spreadsheets pad rows with separators, the header too.
    while headers and headers[-1] == ("", None):
        headers.pop()
    if not numbers and all(name == "" or _is_number(name) for name, _ in headers):
        raise SurveyError(source, [f"row {first[0]} should name the columns, but holds '{first[1].strip()}'"])

    if len(headers) == 1 and " " in headers[0][0]:
        raise SurveyError(source, [f"row {first[0]} must separate its cells by commas, semicolons or tabs"])

    rows: list[int] = []
    table: list[list[str]] = []
    broken: list[tuple[int, str]] = []
    for number, line in lines:
        try:
            row = cells(line)
        except csv.Error as error:
            broken.append((number, str(error)))
            continue
        if not any(row):
            continue
        while len(row) > len(headers) and not row[-1]:
            row.pop()
        if len(row) != len(headers):
            broken.append((number, f"{len(row)} cells"))
            continue
        rows.append(number)
        table.append(row)
    if broken:
        raise SurveyError(
            source,
            [
                f"every row needs {len(headers)} cells like the header: {list_rows(broken)}; "
                f"write decimals with a point, and text that holds '{separator}' in double quotes"
            ],
        )
    columns = [
        RawColumn(name, unit, np.array([row[i] for row in table], dtype=np.str_))
        for i, (name, unit) in enumerate(headers)
    ]
    unnamed = [i for i, each in enumerate(columns, 1) if not each.header and (each.cells != "").any()]
    if unnamed:
        raise SurveyError(source, [f"the header has no name for column {', '.join(map(str, unnamed))}"])
    return RawTable(tuple(each for each in columns if each.header), np.array(rows, dtype=np.int64))


def _lines(source: str, content: bytes) -> Iterator[tuple[int, str]]:
    """Lines that are neither blank nor comment, with their numbers as an editor shows them."""
    if b"\0" in content:
        raise SurveyError(source, ["is neither a text table nor NetCDF; save it as CSV in UTF-8"])
    try:
        text = content.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        number = content.count(b"\n", 0, error.start) + 1
        raise SurveyError(
            source, [f"row {number} is no UTF-8 text; save the table as CSV in UTF-8"]
        ) from error
    for number, line in enumerate(io.StringIO(text, newline=None), 1):
        if line.strip() and not line.lstrip().startswith("#"):
            yield number, line.rstrip("\n")


def _is_number(text: str) -> bool:
    try:
        float(text)
    except ValueError:
        return False
    return True


def _netcdf(source: str) -> RawTable:
    try:
        # Times here are durations with units of their own, not dates.
        with xr.open_dataset(source, engine="netcdf4", decode_times=False, decode_timedelta=False) as opened:
            ds = opened.load()
    except (OSError, RuntimeError, ValueError) as error:
        raise SurveyError(source, [f"damaged or no NetCDF: get the file again ({error})"]) from error
    variables = {str(name): variable for name, variable in ds.variables.items() if variable.ndim > 0}
    layouts = {variable.dims for variable in variables.values()}
    if len(layouts) != 1 or len(next(iter(layouts))) != 1:
        found = ", ".join(f"{name}({', '.join(map(str, v.dims))})" for name, v in variables.items())
        raise SurveyError(
            source, [f"holds no table: all variables must share one dimension; it has {found or 'none'}"]
        )
    columns = (
        RawColumn(name, str(variable.attrs.get("units", "")).strip() or None, variable.values)
        for name, variable in variables.items()
    )
    (length,) = {variable.size for variable in variables.values()}
    return RawTable(tuple(columns), np.arange(1, length + 1, dtype=np.int64))
