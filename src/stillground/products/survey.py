"""``survey.nc``: lines, stations and boreholes of a run as layers for a map, with what to click on."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import xarray as xr
from numpy.typing import NDArray
from pyproj import CRS

from stillground.products import cf
from stillground.products.boreholes import boreholes
from stillground.products.geometry import layer
from stillground.products.line import Line
from stillground.products.netcdf import write_netcdf
from stillground.products.provenance import Provenance
from stillground.protocols import Array

Fields = dict[str, tuple[NDArray[Any], dict[str, str]]]


def survey_dataset(
    lines: Sequence[Line], *, static_units: str, crs: CRS | None, provenance: Provenance
) -> xr.Dataset:
    """The layers of a run.

    Parameters
    ----------
    lines : sequence of Line
        At least one.
    static_units : str
        Of the stations' statics.
    crs : CRS or None
        Projected; None for a local frame.
    provenance : Provenance
        Of the run.

    Returns
    -------
    xarray.Dataset
        The layers ``lines`` (traces from the first position to the last; none of columns), ``stations``
        (points), ``boreholes`` (lines from the top down) and ``rays`` (the ways of data where rays bend),
        with fields that begin with ``line_``, ``station_``, ``borehole_`` and ``ray_``. Elevations are in
        the CRS's unit, as clients that draw in space expect.
    """
    unit, metres = cf.plan_unit(crs)
    stations = pd.concat([line.stations.assign(profile=line.name) for line in lines], ignore_index=True)
    places = stations[["x", "y", "z"]].to_numpy() / metres
    variables = _lines([line for line in lines if len(line.trace) > 1], crs)
    fields = _station_fields(stations, static_units)
    # With a CRS one layer of the file must have the standard names, and no other may.
    alone = not variables
    variables |= layer("station", "point", tuple(places.T), fields, crs=crs, named=alone)
    variables |= _boreholes(stations, places, metres, crs)
    variables |= _rays(lines, metres, crs)
    variables["crs"] = xr.Variable((), np.int32(0), cf.crs_attributes(crs))
    summary = (
        f"Lines, stations and boreholes of {len(lines)} profiles, "
        f"with the verdict on each line and the misfit at each station."
    )
    bounds = cf.bounds(places[:, 0], places[:, 1], places[:, 2], crs, units=unit)
    return xr.Dataset(variables, attrs=provenance.attributes(summary) | bounds)


def write_survey(folder: Path, dataset: xr.Dataset) -> Path:
    """Write ``survey.nc`` into ``folder``; `OutputError` when the place cannot be written."""
    path = folder / "survey.nc"
    write_netcdf(dataset, path)
    return path


def _lines(lines: Sequence[Line], crs: CRS | None) -> dict[str, xr.Variable]:
    if not lines:
        return {}
    traces = [_surveyed(line) for line in lines]
    said = [line.picture.attrs for line in lines]
    fields: Fields = {
        "line_profile": _text([line.name for line in lines], "profile"),
        "line_verdict": _text([one["verdict"] for one in said], "whether the answer depends on the grid"),
        "line_order": _numbers([one.get("order", np.nan) for one in said], "observed order of convergence"),
        "line_rule": _text([one["chosen_rule"] for one in said], "stopping rule"),
        "line_iteration": _numbers([one["chosen_iteration"] for one in said], "iteration of the answer"),
        "line_misfit": _numbers(
            [one.get("chosen_chi_square_recomputed", one["chosen_chi_square"]) for one in said],
            "mean squared residual over error",
        ),
        "line_length": _numbers([line.last - line.first for line in lines], "length", "m"),
    }
    counts = np.array([len(trace) for trace in traces])
    nodes = tuple(np.vstack(traces).T)
    return layer("line", "line", nodes, fields, counts=counts, crs=crs, named=True)


def _surveyed(line: Line) -> Array:
    """The trace between the outermost positions."""
    distance = line.picture["distance"].to_numpy()
    inner = distance[(distance > line.first + 1e-6) & (distance < line.last - 1e-6)]
    at = np.r_[line.first, inner, line.last]
    return np.column_stack([np.interp(at, distance, along) for along in line.trace.T])


def _station_fields(stations: pd.DataFrame, static_units: str) -> Fields:
    return {
        "station_profile": _text(stations["profile"], "profile"),
        "station_what": _text(stations["what"], "what stands there"),
        "station_name": _text(stations["what"] + " " + stations["number"].astype(str), "name"),
        "station_number": _counts(stations["number"], "number, in the order of the table"),
        "station_data": _counts(stations["data"], "data that it has part in"),
        "station_residual": _numbers(stations["residual"], "mean of observed less predicted over error"),
        "station_weight": _numbers(stations["weight"], "mean weight of its data, less than 1 with outliers"),
        "station_static": _numbers(stations["static"], "constant fitted for it", static_units),
    }


def _boreholes(
    stations: pd.DataFrame, places: Array, metres: float, crs: CRS | None
) -> dict[str, xr.Variable]:
    # To the millimetre, a position that is both source and receiver is one place.
    holes, profiles = [], []
    for name, among in stations.groupby("profile", sort=False):
        _, once = np.unique(among[["x", "y", "z"]].to_numpy().round(3), axis=0, return_index=True)
        index = among.index.to_numpy()[np.sort(once)]
        found = [index[hole] for hole in boreholes(places[index] * metres)]
        holes += found
        profiles += [str(name)] * len(found)
    if not holes:
        return {}
    lengths = [metres * np.linalg.norm(np.diff(places[hole], axis=0), axis=1).sum() for hole in holes]
    counts = np.array([hole.size for hole in holes])
    fields: Fields = {
        "borehole_profile": _text(profiles, "profile"),
        "borehole_positions": _counts(counts, "positions in it"),
        "borehole_length": _numbers(lengths, "length from the highest position to the lowest", "m"),
    }
    nodes = tuple(places[np.concatenate(holes)].T)
    return layer("borehole", "line", nodes, fields, counts=counts, crs=crs)


def _rays(lines: Sequence[Line], metres: float, crs: CRS | None) -> dict[str, xr.Variable]:
    kept = [(line, datum) for line in lines for datum, ray in enumerate(line.rays) if len(ray)]
    if not kept:
        return {}
    nodes = []
    for line, datum in kept:
        distance, elevation = line.rays[datum].T
        plan = [np.interp(distance, line.picture["distance"].to_numpy(), along) for along in line.trace.T]
        nodes.append(np.column_stack([*plan, elevation / metres]))
    fields: Fields = {
        "ray_profile": _text([line.name for line, _ in kept], "profile"),
        "ray_row": _counts([line.fit["row"].iloc[datum] for line, datum in kept], "row of the table"),
        "ray_residual": _numbers(
            [line.fit["residual_over_error"].iloc[datum] for line, datum in kept],
            "observed less predicted over error",
        ),
    }
    counts = np.array([len(each) for each in nodes])
    return layer("ray", "line", tuple(np.vstack(nodes).T), fields, counts=counts, crs=crs)


def _text(values: Any, long_name: str) -> tuple[NDArray[Any], dict[str, str]]:
    return np.array(list(values), dtype=object), {"long_name": long_name}


def _counts(values: Any, long_name: str) -> tuple[NDArray[Any], dict[str, str]]:
    return np.array(values, dtype=np.int32), {"long_name": long_name, "units": "1"}


def _numbers(values: Any, long_name: str, units: str = "1") -> tuple[NDArray[Any], dict[str, str]]:
    return np.array(values, dtype=np.float32), {"long_name": long_name, "units": units}
