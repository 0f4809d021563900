"""``<profile>_section.nc`` or ``<profile>_column.nc``: the answer, and how far it can be relied on."""

from __future__ import annotations

import re
from dataclasses import replace
from pathlib import Path

import numpy as np
import xarray as xr
from pyproj import CRS

from stillground.products import cf
from stillground.products.netcdf import write_netcdf
from stillground.products.provenance import Provenance, argument
from stillground.products.quality import qualities
from stillground.products.raster import (
    Surface,
    altitude,
    coordinates,
    dimensions,
    ground,
    map_variable,
    raster,
)
from stillground.products.reliability import MEANINGS, NO_DATA, reliability, reliability_comment
from stillground.protocols import Array, Differences, Field, GroundProperty, Result


def picture_dataset(
    name: str,
    result: Result,
    *,
    easting: Array,
    northing: Array,
    crs: CRS | None,
    surface: Surface | None,
    tolerance: float,
    provenance: Provenance,
    differences: Differences | None = None,
) -> xr.Dataset:
    """The answer as a dataset: a section on (elevation descending, distance), or a column on elevation.

    Parameters
    ----------
    name : str
        Of the profile.
    result : Result
    easting, northing : array, shape (n_distance,)
        Plan coordinates of the nodes' distances, in the CRS's unit; in m in a local frame. Of a column
        one place.
    crs : CRS or None
        Projected; None for a local frame.
    surface : pair of arrays (distance, elevation), m, or None
        All above it is NaN, and fill in the flags.
    tolerance : float
        Largest change since the rung before that counts as none, relative to the anomaly.
    provenance : Provenance
    differences : Differences, optional
        The usual estimate, on a dimension ``interval`` of its own.

    Returns
    -------
    xarray.Dataset
        The ground property, its reciprocal where it has one, all `qualities`, ``reliability``,
        ``easting``, ``northing``, ``surface_altitude`` where there is a surface, and ``crs``; in a section
        the trace as a line geometry and ``section_crs``; averages as scalars, ``<property>_average_<over>``.
    """
    seen = result.property
    section = len(result.axes) == 2
    inside = ground(result.axes, surface)
    dims = dimensions(len(result.axes))
    mapping = (
        cf.grid_mapping("section_crs", "distance elevation", crs) if section else cf.plan_grid_mapping(crs)
    )
    located = {"coordinates": "easting northing"} | ({"grid_mapping": mapping} if mapping else {})

    answers = as_read(Field(seen.name, result.model, seen.units, seen.long_name), seen)
    companions = qualities(result)
    names = " ".join([field.name for field, _ in companions] + ["reliability"])
    answer = {"coverage_content_type": "modelResult", "ancillary_variables": names} | located
    quality = {"coverage_content_type": "qualityInformation"} | located
    variables = {field.name: map_variable(field, inside, answer) for field in answers}
    for field, comment in companions:
        said = {"comment": comment} if comment else {}
        variables[field.name] = map_variable(field, inside, said | quality)
    variables["reliability"] = xr.Variable(
        dims,
        raster(reliability(result, tolerance, inside)),
        {
            "standard_name": "status_flag",
            "long_name": "how far the value can be relied on",
            "flag_values": np.arange(len(MEANINGS), dtype=np.int8),
            "flag_meanings": " ".join(MEANINGS),
            "comment": reliability_comment(result, tolerance),
        }
        | quality,
        {"_FillValue": np.int8(NO_DATA)},
    )

    axes = coordinates(result.axes)
    along = "distance" if section else ()
    if surface is not None:
        at = altitude(result.axes[0] if section else np.zeros(1), surface)
        # Encoded without coordinates, lest a client takes it for a layer of its own.
        variables["surface_altitude"] = xr.Variable(
            along, at if section else at[0], cf.SURFACE_ALTITUDE, {"coordinates": None}
        )
    variables["crs"] = xr.Variable((), np.int32(0), cf.crs_attributes(crs))
    if section:
        variables |= _trace(name, easting.size, {} if crs is None else {"grid_mapping": "crs"})
        frame = cf.section_crs_attributes(crs, result.axes[0], axes["elevation"].to_numpy())
        variables["section_crs"] = xr.Variable((), np.int32(0), frame)
    variables |= _averages(result)
    if differences is not None:
        variables |= _differences(differences, seen)
    plan = {
        label: xr.Variable(along, values if section else values[0], cf.plan_attributes(label, crs))
        for label, values in (("easting", easting), ("northing", northing))
    }
    shape = "Section" if section else "Column"
    summary = (
        f"{shape} of {seen.long_name} along profile {name} at the pick of the stopping rule "
        f"{result.chosen.rule}. Dependence on the grid: {result.ladder.verdict.word}."
    )
    return xr.Dataset(
        variables,
        axes | plan,
        provenance.attributes(summary)
        | argument(result)
        | cf.bounds(easting, northing, result.axes[-1], crs),
    )


def product(n_axes: int) -> str:
    """What the product is called: a section, or a column where elevation is all there is."""
    return "section" if n_axes == 2 else "column"


def write_picture(folder: Path, name: str, dataset: xr.Dataset) -> Path:
    """Write ``<name>_section.nc`` or ``<name>_column.nc`` into ``folder``.

    Raises
    ------
    OutputError
        When the place cannot be written.
    """
    path = folder / f"{name}_{product(2 if 'distance' in dataset.dims else 1)}.nc"
    write_netcdf(dataset, path)
    return path


def as_read(field: Field, seen: GroundProperty) -> list[Field]:
    """The field of a ground property, and its reciprocal where people read that."""
    if seen.reciprocal is None:
        return [field]
    name, units, long_name = seen.reciprocal
    return [field, Field(field.name.replace(seen.name, name, 1), 1 / field.values, units, long_name)]


def _averages(result: Result) -> dict[str, xr.Variable]:
    """Every average and its reciprocal as scalars, its errors in the unit of the property."""
    seen = result.property
    variables = {}
    for over, mean in result.averages.items():
        place = re.sub(r"\W+", "_", over)
        fields = as_read(
            Field(f"{seen.name}_average_{place}", np.array(mean.value), seen.units, seen.long_name), seen
        )
        for error, values in (("noise_part", mean.noise_part), ("total_error", mean.total_error)):
            if values is not None:
                said = f"{error.replace('_', ' ')} of {seen.long_name}"
                named = f"{fields[0].name}_{error}"
                fields.append(Field(named, np.array(values), seen.units, said))
        for field in fields:
            labels = {"long_name": f"{field.long_name}, average {over}", "units": field.units}
            variables[field.name] = xr.Variable((), field.values, labels)
    return variables


def _differences(given: Differences, seen: GroundProperty) -> dict[str, xr.Variable]:
    """The usual estimate between pairs of elevations; a reciprocal is missing where there is none."""
    variables = {
        f"interval_{end}": xr.Variable(
            "interval", values, {"long_name": f"{end} end of the interval, elevation", "units": "m"}
        )
        for end, values in (("lower", given.lower), ("upper", given.upper))
    }
    plain = Field(f"{seen.name}_of_interval", given.values, seen.units, "")
    positive = np.where(given.values > 0, given.values, np.nan)
    for field in (plain, *as_read(replace(plain, values=positive), seen)[1:]):
        labels = {"long_name": f"{given.long_name}: {field.name.split('_')[0]}", "units": field.units}
        if field is not plain:
            labels["comment"] = f"Missing where noise makes {seen.name} zero or less."
        variables[field.name] = xr.Variable("interval", field.values.astype(np.float32), labels)
    return variables


def _trace(name: str, n_nodes: int, mapping: dict[str, str]) -> dict[str, xr.Variable]:
    """The profile in plan as a CF line geometry with one text field."""
    container = {
        "geometry_type": "line",
        "node_count": "trace_node_count",
        "node_coordinates": "easting northing",
    }
    counts = np.array([n_nodes], dtype=np.int32)
    label = {"long_name": "profile", "geometry": "trace_geometry"}
    return {
        "trace_geometry": xr.Variable((), np.int32(0), container | mapping),
        "trace_node_count": xr.Variable("trace", counts, {"long_name": "nodes of the trace"}),
        "trace_name": xr.Variable("trace", np.array([name], dtype=object), label | mapping),
    }
