"""Tables of kernels: for each datum of a survey, how it weighs the ground along given axes."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Final

import numpy as np
import xarray as xr

from stillground.errors import SurveyError
from stillground.protocols import Array, Integers
from stillground.survey.faults import list_rows
from stillground.survey.read import numbers_of
from stillground.survey.table import is_netcdf, open_table
from stillground.survey.units import to_si

LAYOUTS: Final = (("elevation",), ("distance", "elevation"))

# Coordinates may be rounded to this share of their spacing.
_ROUNDED = 1e-2
_LEAST_NODES = 3


@dataclass(frozen=True)
class Kernels:
    """Kernels on even nodes, in the order of their file.

    Parameters
    ----------
    axes : tuple of str
        One of `LAYOUTS`.
    origin, spacing : tuple of float
        Of the nodes along each axis, ascending, m.
    values : array, shape (n_kernels, nodes along each axis)
    """

    axes: tuple[str, ...]
    origin: tuple[float, ...]
    spacing: tuple[float, ...]
    values: Array


def kernel_layout(path: Path) -> tuple[tuple[str, ...], Mapping[str, str]]:
    """Axes of the kernels of a file, and what the file says of their units, without reading them.

    Returns
    -------
    axes : tuple of str
    attributes : mapping of str to str
        Those of ``property``, ``property_units`` and ``data_units`` that a NetCDF file has.

    Raises
    ------
    SurveyError
        When there is no such file, or a NetCDF file without kernels.
    """
    if not is_netcdf(path):
        return LAYOUTS[0], {}
    with _opened(path) as ds:
        kernel = _kernel(path, ds)
        axes = next(layout for layout in LAYOUTS if {*kernel.dims} == {"datum", *layout})
        wanted = ("property", "property_units", "data_units")
        return axes, {name: str(kernel.attrs[name]) for name in wanted if name in kernel.attrs}


def read_kernels(path: Path) -> Kernels:
    """Read kernels.

    Parameters
    ----------
    path : Path
        NetCDF with a variable ``kernel(datum, elevation)`` or ``kernel(datum, distance, elevation)`` and
        coordinates in m, or CSV whose header holds the elevations of the nodes, m, and each row a kernel.

    Raises
    ------
    SurveyError
        With all faults: coordinates that are missing, no numbers or uneven, cells that are not finite.
    """
    if is_netcdf(path):
        with _opened(path) as ds:
            kernel = _kernel(path, ds)
            axes = next(layout for layout in LAYOUTS if {*kernel.dims} == {"datum", *layout})
            faults: list[str] = []
            nodes = [_coordinate(ds, axis, faults) for axis in axes]
            values = np.asarray(kernel.transpose("datum", *axes).values, dtype=np.float64)
            rows = np.arange(1, len(values) + 1)
    else:
        raw = open_table(path, numbers=True)
        axes, rows = LAYOUTS[0], raw.rows
        heads, words = numbers_of(np.array([each.header for each in raw.columns]))
        faults = [
            f"the header must hold the elevations of the nodes, m, and nothing else; it has '{word}'"
            for word in list(words.values())[:1]
        ]
        nodes = [heads]
        columns = [numbers_of(each.cells) for each in raw.columns]
        values = np.column_stack([numbers for numbers, _ in columns]) if raw.columns else np.empty((0, 0))
        cells = [
            (int(rows[i]), f"'{text}' under {each.header}")
            for each, (_, texts) in zip(raw.columns, columns, strict=True)
            for i, text in texts.items()
        ]
        if cells:
            faults.append(f"kernels must be numbers: {list_rows(sorted(cells))}")
            for column, (_, texts) in enumerate(columns):
                values[list(texts), column] = 0.0
    faults += _not_finite(values, rows)
    if len(values) == 0:
        faults.append("it has no kernel; give one a datum")
    if not faults:
        values, origin, spacing = _even(axes, nodes, values, faults)
    if faults:
        raise SurveyError(str(path), faults)
    return Kernels(axes, origin, spacing, values)


def _opened(path: Path) -> xr.Dataset:
    try:
        return xr.open_dataset(path, engine="netcdf4", decode_times=False, decode_timedelta=False)
    except (OSError, RuntimeError, ValueError) as error:
        raise SurveyError(str(path), [f"damaged or no NetCDF: get the file again ({error})"]) from error


def _kernel(path: Path, ds: xr.Dataset) -> xr.DataArray:
    """The variable, of numbers and on dimensions that we know."""
    layouts = " or ".join(f"kernel(datum, {', '.join(layout)})" for layout in LAYOUTS)
    if "kernel" not in ds:
        names = ", ".join(map(str, ds.variables)) or "none"
        raise SurveyError(str(path), [f"it needs a variable {layouts}; it has {names}"])
    kernel = ds["kernel"]
    if not any({*kernel.dims} == {"datum", *layout} for layout in LAYOUTS):
        found = f"kernel({', '.join(map(str, kernel.dims))})"
        raise SurveyError(str(path), [f"it needs {layouts}; it has {found}"])
    if kernel.dtype.kind not in "fiu":
        raise SurveyError(str(path), [f"kernel must hold numbers; it holds {kernel.dtype}"])
    return kernel


def _coordinate(ds: xr.Dataset, axis: str, faults: list[str]) -> Array:
    if axis not in ds.coords:
        faults.append(f"coordinate {axis} is missing; give the places of its nodes, m")
        return np.arange(ds.sizes[axis], dtype=np.float64)
    coordinate = ds[axis]
    try:
        return to_si(np.asarray(coordinate.values, dtype=np.float64), coordinate.attrs.get("units", "m"), "m")
    except (TypeError, ValueError) as error:
        faults.append(f"coordinate {axis}: {error}; give the places of its nodes, m")
        return np.arange(ds.sizes[axis], dtype=np.float64)


def _not_finite(values: Array, rows: Integers) -> list[str]:
    bad = ~np.isfinite(values).all(axis=tuple(range(1, values.ndim)))
    return (
        [f"kernels must be finite: {list_rows((row, '') for row in rows[bad].tolist())}"] if bad.any() else []
    )


def _even(
    axes: tuple[str, ...], nodes: list[Array], values: Array, faults: list[str]
) -> tuple[Array, tuple[float, ...], tuple[float, ...]]:
    """Kernels with all axes ascending; uneven axes are added to the faults."""
    origin, spacing = [], []
    for number, (axis, places) in enumerate(zip(axes, nodes, strict=True), start=1):
        if places.size < _LEAST_NODES or not np.isfinite(places).all():
            faults.append(f"{axis} needs {_LEAST_NODES} nodes or more at finite places; it has {places.size}")
            continue
        step = (places[-1] - places[0]) / (places.size - 1)
        gaps = np.diff(places)
        worst = int(np.argmax(np.abs(gaps - step)))
        if not abs(gaps[worst] - step) <= _ROUNDED * abs(step):
            faults.append(
                f"nodes along {axis} must be evenly spaced, {abs(step):g} m here on average: from "
                f"{places[worst]:g} to {places[worst + 1]:g} m it is {abs(gaps[worst]):g} m; "
                f"resample the kernels"
            )
        if step < 0:
            values = np.flip(values, axis=number)
        origin.append(float(min(places[0], places[-1])))
        spacing.append(abs(float(step)))
    return np.ascontiguousarray(values), tuple(origin), tuple(spacing)
