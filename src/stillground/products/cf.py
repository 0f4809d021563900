"""What the CF conventions want, as tables: attributes of coordinates, companions and CRS variables."""

from __future__ import annotations

import unicodedata
import warnings
from collections.abc import Mapping
from typing import Any

import numpy as np
from pyproj import CRS, Transformer

from stillground.protocols import Array

COORDINATES: Mapping[str, Mapping[str, str]] = {
    "elevation": {
        "standard_name": "altitude",
        "long_name": "elevation",
        "units": "m",
        "positive": "up",
        "axis": "Z",
    },
    "depth": {
        "standard_name": "depth",
        "long_name": "depth below the ground surface",
        "units": "m",
        "positive": "down",
        "axis": "Z",
    },
    # No axis: a client would take distance for easting.
    "distance": {"long_name": "distance along the profile", "units": "m"},
    "iteration": {"long_name": "iteration", "units": "1"},
    "kept_iteration": {"long_name": "iteration whose picture was kept", "units": "1"},
    "rule": {"long_name": "stopping rule"},
}

PLAN: Mapping[str, Mapping[str, str]] = {
    "easting": {"long_name": "easting", "axis": "X"},
    "northing": {"long_name": "northing", "axis": "Y"},
}
PLAN_STANDARD_NAMES = {"easting": "projection_x_coordinate", "northing": "projection_y_coordinate"}

SURFACE_ALTITUDE = {
    "standard_name": "surface_altitude",
    "long_name": "elevation of the ground surface",
    "units": "m",
    "coverage_content_type": "auxiliaryInformation",
}

ENGINEERING_WKT = (
    'ENGCRS["Distance along the profile and height",EDATUM["Start of the profile"],'
    'CS[Cartesian,2],AXIS["distance (d)",unspecified,ORDER[1],LENGTHUNIT["metre",1]],'
    'AXIS["height (h)",up,ORDER[2],LENGTHUNIT["metre",1]]]'
)

UDUNITS_LENGTHS = {
    "metre": "m",
    "kilometre": "km",
    "foot": "international_foot",
    "US survey foot": "US_survey_foot",
}


def ascii_text(text: str) -> str:
    """The text in ASCII, the degree sign as ``deg``: clients lose a CRS over one accent.

    Examples
    --------
    >>> ascii_text("Réunion, 55°E")
    'Reunion, 55degE'
    """
    spelt = unicodedata.normalize("NFKD", text.replace("°", "deg"))
    return spelt.encode("ascii", "ignore").decode()


def crs_attributes(crs: CRS | None) -> dict[str, Any]:
    """Attributes of the variable ``crs``: the horizontal CRS, and the vertical datum by name.

    Without a CRS the coordinates are a local frame, and the only attribute says so.
    """
    if crs is None:
        return {"long_name": "local frame: the survey gave no coordinate reference system"}
    parts = crs.sub_crs_list or [crs]
    horizontal = parts[0]
    with warnings.catch_warnings():
        # Of projections for which CF has no name: the text says it all.
        warnings.simplefilter("ignore", UserWarning)
        found = horizontal.to_cf(wkt_version="WKT2_2019")
    attributes = {
        name: ascii_text(value) if isinstance(value, str) else value
        for name, value in found.items()
        if value is not None and value != "unknown"
    }
    attributes["spatial_ref"] = attributes["crs_wkt"]
    for vertical in parts[1:]:
        attributes["geopotential_datum_name"] = ascii_text((vertical.datum or vertical).name)
    return attributes


def section_crs_attributes(crs: CRS | None, distance: Array, elevation: Array) -> dict[str, Any]:
    """Attributes of the variable ``section_crs``: as ``crs``, and the section's own frame for GDAL.

    Without a CRS the section's own frame is all there is.

    Parameters
    ----------
    crs : CRS or None
    distance, elevation : array, shapes (nx,), (nz,), evenly spaced
        Node coordinates, m, elevation descending; the GeoTransform gives outer edges.
    """
    return {
        "crs_wkt": ENGINEERING_WKT,
        **crs_attributes(crs),
        "spatial_ref": ENGINEERING_WKT,
        "GeoTransform": _geotransform(distance, elevation),
    }


def map_crs_attributes(crs: CRS | None, x: Array, y: Array) -> dict[str, Any]:
    """Attributes of the variable ``crs`` beside a map: as `crs_attributes`, and the map's outer edges.

    Parameters
    ----------
    crs : CRS or None
    x, y : array, shapes (nx,), (ny,), evenly spaced
        Centres of its cells, y descending.
    """
    return {**crs_attributes(crs), "GeoTransform": _geotransform(x, y)}


def grid_mapping(variable: str, coordinates: str, crs: CRS | None) -> str:
    """What ``grid_mapping`` says on a raster, given its CRS variable and its coordinates.

    CF has no ``grid_mapping_name`` for an engineering frame, nor for every projection, so these are told by
    their text alone, which goes beyond the letter of CF. Clients find the GeoTransform through it, and
    checkers do not ask for the name in the form that lists the coordinates.
    """
    named = crs is not None and crs_attributes(crs).get("grid_mapping_name", "unknown") != "unknown"
    return variable if named else f"{variable}: {coordinates}"


def plan_grid_mapping(crs: CRS | None) -> str:
    """What ``grid_mapping`` says on what stands at a place in plan; nothing in a local frame."""
    return "" if crs is None else "crs"


def plan_attributes(name: str, crs: CRS | None) -> dict[str, str]:
    """Attributes of ``easting`` or ``northing``; in a local frame they carry no standard name."""
    if crs is None:
        return {**PLAN[name], "units": plan_unit(crs)[0]}
    return {**PLAN[name], "standard_name": PLAN_STANDARD_NAMES[name], "units": plan_unit(crs)[0]}


def map_attributes(name: str, crs: CRS | None) -> dict[str, str]:
    """Attributes of a map's axis: of a local frame too, or its ``axis`` is taken for a longitude."""
    return plan_attributes(name, crs) | {"standard_name": PLAN_STANDARD_NAMES[name]}


def plan_unit(crs: CRS | None) -> tuple[str, float]:
    """The unit of plan coordinates, UDUNITS text, and one of it in m; metres in a local frame."""
    if crs is None:
        return "m", 1.0
    axis = crs.axis_info[0]
    metres = float(axis.unit_conversion_factor)
    return UDUNITS_LENGTHS.get(axis.unit_name, f"{metres:.15g} m"), metres


def bounds(
    easting: Array,
    northing: Array,
    vertical: Array,
    crs: CRS | None,
    *,
    units: str = "m",
    positive: str = "up",
) -> dict[str, Any]:
    """ACDD's geospatial bounds: heights or depths always, longitude and latitude where there is a CRS."""
    extent: dict[str, Any] = {
        "geospatial_vertical_min": float(vertical.min()),
        "geospatial_vertical_max": float(vertical.max()),
        "geospatial_vertical_units": units,
        "geospatial_vertical_positive": positive,
    }
    if crs is not None:
        to_degrees = Transformer.from_crs(crs, "EPSG:4326", always_xy=True)
        names = (("lon", "degrees_east"), ("lat", "degrees_north"))
        for (name, unit), along in zip(names, to_degrees.transform(easting, northing), strict=True):
            if np.isfinite(along).all():  # Places that the CRS cannot hold come out infinite.
                extent[f"geospatial_{name}_min"] = float(np.min(along))
                extent[f"geospatial_{name}_max"] = float(np.max(along))
                extent[f"geospatial_{name}_units"] = unit
    return extent


def _geotransform(across: Array, down: Array) -> str:
    dx, dy = _step(across), _step(down)
    corner = (across[0] - dx / 2, dx, 0.0, down[0] - dy / 2, 0.0, dy)
    return " ".join(f"{number:.15g}" for number in corner)


def _step(axis: Array) -> float:
    return float(axis[-1] - axis[0]) / (axis.size - 1)
