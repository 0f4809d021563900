"""``<profile>_curtain.nc``: the section as upright cells in space, along a trace that may be bent."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray
from pyproj import CRS

from stillground.products import cf
from stillground.products.cells import thinned
from stillground.products.curtain_style import style
from stillground.products.geometry import layer
from stillground.products.line import answers, errors
from stillground.products.netcdf import write_netcdf
from stillground.products.reliability import NO_DATA, RELIABLE
from stillground.whole import whole

_SAID = (
    "standard_name",
    "long_name",
    "units",
    "flag_values",
    "flag_meanings",
    "comment",
    "coverage_content_type",
)


def curtain_dataset(section: xr.Dataset, crs: CRS | None) -> xr.Dataset:
    """A section's cells as the layer ``cells``.

    Parameters
    ----------
    section : xarray.Dataset
        From `picture_dataset`.
    crs : CRS or None
        Its CRS.

    Returns
    -------
    xarray.Dataset
        Of every cell between four nodes in the ground an upright quadrilateral, its ground property, the
        reciprocal and the errors there (means of the four: the means over the cell), and ``reliability``,
        the worst of the four. Elevations are in the CRS's unit, as clients that draw in space expect. A
        large section is thinned.
    """
    nodes = thinned(section)
    names = (*answers(section), *errors([section]))
    inside = np.logical_and.reduce([np.isfinite(corner) for corner in _corners(nodes[names[0]])])
    row, column = np.nonzero(inside)
    fields: dict[str, tuple[NDArray[Any], dict[str, Any]]] = {}
    for name in names:
        mean = np.stack(_corners(nodes[name])).mean(axis=0, dtype=np.float64)[inside].astype(np.float32)
        fields[name] = mean, _said(section[name])
    if len(answers(section)) > 1:
        seen, other = answers(section)
        fields[other] = (1 / fields[seen][0]).astype(np.float32), fields[other][1]
    flags = np.stack(_corners(nodes["reliability"]))
    worst = np.where(flags == NO_DATA, RELIABLE, flags).max(axis=0)[inside].astype(np.int8)
    fields["reliability"] = worst, _said(section["reliability"])

    metres = cf.plan_unit(crs)[1]
    # Around each cell from its upper near corner, down, along, up and back.
    along = column[:, np.newaxis] + np.array([0, 0, 1, 1, 0])
    down = row[:, np.newaxis] + np.array([0, 1, 1, 0, 0])
    places = (
        nodes["easting"].to_numpy()[along].ravel(),
        nodes["northing"].to_numpy()[along].ravel(),
        nodes["elevation"].to_numpy()[down].ravel() / metres,
    )
    counts = np.full(row.size, 5)
    variables = layer("cell", "polygon", places, fields, counts=counts, crs=crs, named=True)
    variables["crs"] = xr.Variable((), np.int32(0), section["crs"].attrs)
    summary = f"Upright cells in space. {section.attrs['summary']}"
    return xr.Dataset(variables, attrs=section.attrs | {"summary": summary})


def write_curtain(folder: Path, name: str, dataset: xr.Dataset) -> Path:
    """Write ``<name>_curtain.nc`` and beside it ``<name>_curtain.qml``, its style.

    Raises
    ------
    OutputError
        When the place cannot be written.
    """
    path = folder / f"{name}_curtain.nc"
    write_netcdf(dataset, path)
    with whole(path.with_suffix(".qml")) as temporary:
        temporary.write_text(style(dataset), encoding="utf-8", newline="\n")
    return path


def _corners(variable: xr.DataArray) -> tuple[NDArray[Any], ...]:
    """A raster at the four corners of each cell."""
    values = variable.to_numpy()
    return values[:-1, :-1], values[1:, :-1], values[1:, 1:], values[:-1, 1:]


def _said(variable: xr.DataArray) -> dict[str, Any]:
    return {key: variable.attrs[key] for key in _SAID if key in variable.attrs}
