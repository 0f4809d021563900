"""``<profile>_section.nc``: the answer along the profile, and how far it can be relied on."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import xarray as xr
from pyproj import CRS

from stillground.products import cf
from stillground.products.netcdf import write_netcdf
from stillground.products.provenance import Provenance
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
from stillground.protocols import Array, Field, Result


def section_dataset(
    name: str,
    result: Result,
    *,
    easting: Array,
    northing: Array,
    crs: CRS | None,
    surface: Surface | None,
    tolerance: float,
    provenance: Provenance,
) -> xr.Dataset:
    """The section as a dataset on (elevation descending, distance).

    Parameters
    ----------
    name : str
        Of the profile.
    result : Result
        On axes (distance, elevation), m.
    easting, northing : array, shape (n_distance,)
        Plan coordinates of ``result.axes[0]``, in the CRS's unit; in m in a local frame.
    crs : CRS or None
        Projected; None for a local frame.
    surface : pair of arrays (distance, elevation), m, or None
        All above it is NaN, and fill in the flags.
    tolerance : float
        Largest change since the rung before that counts as none, relative to the anomaly.
    provenance : Provenance

    Returns
    -------
    xarray.Dataset
        The ground property, its reciprocal where it has one, all `qualities`, ``reliability``,
        ``easting``, ``northing``, ``surface_altitude`` where there is a surface, the trace as a line
        geometry, ``crs`` and ``section_crs``.
    """
    seen = result.property
    inside = ground(result.axes, surface)
    dims = dimensions(len(result.axes))
    on_section = {"grid_mapping": cf.section_grid_mapping(crs), "coordinates": "easting northing"}

    answers = [Field(seen.name, result.model, seen.units, seen.long_name)]
    if seen.reciprocal is not None:
        other, units, long_name = seen.reciprocal
        answers.append(Field(other, 1 / result.model, units, long_name))
    companions = qualities(result)
    names = " ".join([field.name for field, _ in companions] + ["reliability"])
    answer = {"coverage_content_type": "modelResult", "ancillary_variables": names} | on_section
    quality = {"coverage_content_type": "qualityInformation"} | on_section
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

    along = result.axes[0]
    if surface is not None:
        # Encoded without coordinates, lest a client takes it for a layer of its own.
        variables["surface_altitude"] = xr.Variable(
            "distance", altitude(along, surface), cf.SURFACE_ALTITUDE, {"coordinates": None}
        )
    variables |= _trace(name, along.size, {} if crs is None else {"grid_mapping": "crs"})
    axes = coordinates(result.axes)
    section_crs = cf.section_crs_attributes(crs, along, axes["elevation"].to_numpy())
    variables["crs"] = xr.Variable((), np.int32(0), cf.crs_attributes(crs))
    variables["section_crs"] = xr.Variable((), np.int32(0), section_crs)
    plan = {
        label: xr.Variable("distance", values, cf.plan_attributes(label, crs))
        for label, values in (("easting", easting), ("northing", northing))
    }
    summary = (
        f"Section of {seen.long_name} along profile {name} at the pick of the stopping rule "
        f"{result.chosen.rule}. Dependence on the grid: {result.ladder.verdict.word}."
    )
    return xr.Dataset(
        variables,
        axes | plan,
        provenance.attributes(summary) | cf.bounds(easting, northing, result.axes[1], crs),
    )


def write_section(folder: Path, name: str, dataset: xr.Dataset) -> Path:
    """Write ``<name>_section.nc`` into ``folder``; `OutputError` when the place cannot be written."""
    path = folder / f"{name}_section.nc"
    write_netcdf(dataset, path)
    return path


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
