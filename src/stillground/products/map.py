"""``map.nc``: slices through all profiles of a run on one grid in the map's coordinates.

A slice holds the sections' values along their traces, carried sideways as far as the ground is taken
to be alike, and nothing elsewhere: between lines nothing was measured.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray
from pyproj import CRS

from stillground.products import cf
from stillground.products.line import Line, answers, errors
from stillground.products.netcdf import write_netcdf
from stillground.products.provenance import Provenance
from stillground.products.raster import carried_up
from stillground.products.reliability import MEANINGS, NO_DATA
from stillground.products.trace import feet
from stillground.protocols import Array

# Kept of the 24 bits of a value: answers are good to 0.02 % and errors to 0.8 %, in a third of the room;
# what is lost is noise beside the errors themselves. The section has all digits.
_BITS, _ERROR_BITS = 11, 6
_COMMENT = (
    "Values of the sections at the nearest place of each line, carried sideways within reach of it; where "
    "several lines are in reach, their mean by the inverse squared distance. Elsewhere nothing was measured. "
    "Rounded to 0.02 %, errors to 0.8 %."
)


@dataclass(frozen=True)
class Slicing:
    """Where and how a map is cut, all in m.

    Parameters
    ----------
    spacing : float
        Between its nodes.
    levels : tuple of float
        Depths below the ground, or elevations, from the top down.
    reach : float
        How far from a line it shows anything.
    elevations : bool
        Levels are elevations and no depths.
    """

    spacing: float
    levels: tuple[float, ...]
    reach: float
    elevations: bool = False


def map_nodes(places: Array, slicing: Slicing, crs: CRS | None) -> tuple[tuple[int, int], tuple[int, int]]:
    """First and last node of a map, east and north, counted in its spacing from the CRS's origin.

    ``places`` are the traces of all profiles, shape (n, 2), in the CRS's unit; the nodes enclose all that
    is within reach of them.
    """
    _, metres = cf.plan_unit(crs)
    step, reach = slicing.spacing / metres, slicing.reach / metres
    low = np.floor((places.min(axis=0) - reach) / step)
    # At least two nodes each way: one alone tells no client how large it is.
    high = np.maximum(np.ceil((places.max(axis=0) + reach) / step), low + 1)
    (west, south), (east, north) = low.astype(int).tolist(), high.astype(int).tolist()
    return (west, east), (south, north)


def map_dataset(
    lines: Sequence[Line], slicing: Slicing, *, crs: CRS | None, provenance: Provenance
) -> xr.Dataset:
    """The map as a dataset on (depth, y descending, x), or (elevation, y, x).

    Parameters
    ----------
    lines : sequence of Line
        At least one, all of one kind.
    slicing : Slicing
    crs : CRS or None
        Projected; None for a local frame.
    provenance : Provenance
        Of the run.

    Returns
    -------
    xarray.Dataset
        The ground property, its reciprocal, its errors, and ``reliability`` of the nearest line; NaN
        off the lines. ``depth_top`` and ``depth_bottom`` lie half-way to the slices beside.

    Notes
    -----
    With r the distance from a line and R the reach a line counts by
    ``(1 - r^2/R^2) / (r^2 + h^2)``, h the map's spacing: inverse distance weights (Shepard 1968), even
    on the lines, fading out at the reach. One line alone keeps its values.

    References
    ----------
    Shepard, D. (1968): A two-dimensional interpolation function for irregularly-spaced data. Proc. 23rd
    ACM National Conference, 517-524.
    """
    sections = [line.picture for line in lines]
    found, means = answers(sections[0]), (answers(sections[0])[0], *errors(sections))
    metres = cf.plan_unit(crs)[1]
    step, reach = slicing.spacing / metres, slicing.reach / metres
    (west, east), (south, north) = map_nodes(np.vstack([line.trace for line in lines]), slicing, crs)
    x = np.asarray(step * np.arange(west, east + 1), dtype=np.float64)
    y = np.asarray(step * np.arange(north, south - 1, -1), dtype=np.float64)

    shape = (len(slicing.levels), y.size * x.size)
    sums = {name: np.zeros(shape) for name in means}
    total = np.zeros(shape)
    nearest = np.full(shape, np.inf)
    flags = np.full(shape, NO_DATA, dtype=np.int8)
    for line in lines:
        index, place, aside = _beside(line, x, y, reach, metres)
        at = _Slices(line, slicing)
        values = {name: _between(at.values(name), place) for name in means}
        known = np.isfinite(values[means[0]]) & (aside < reach)
        weight = np.where(known, (1 - (aside / reach) ** 2) / (aside**2 + step**2), 0.0)
        for name in means:
            sums[name][:, index] += weight * np.where(known, values[name], 0.0)
        total[:, index] += weight
        closer = known & (aside < nearest[:, index])
        nearest[:, index] = np.where(closer, aside, nearest[:, index])
        flags[:, index] = np.where(closer, at.flags()[:, np.rint(place).astype(int)], flags[:, index])

    axis = "elevation" if slicing.elevations else "depth"
    dims, mapping = (axis, "y", "x"), cf.grid_mapping("crs", "x y", crs)
    with np.errstate(invalid="ignore"):
        fields = {name: (sums[name] / total).reshape(-1, y.size, x.size) for name in means}
    if len(found) > 1:
        fields[found[1]] = 1 / fields[found[0]]
    variables = {}
    for name in (*found, *errors(sections)):
        said = {k: sections[0][name].attrs[k] for k in ("long_name", "units", "coverage_content_type")}
        comment = f"{sections[0][name].attrs.get('comment', '')} {_COMMENT}".strip()
        beside = (
            {} if name not in found else {"ancillary_variables": " ".join([*errors(sections), "reliability"])}
        )
        variables[name] = xr.Variable(
            dims,
            _rounded(fields[name], _BITS if name in found else _ERROR_BITS),
            said | {"comment": comment, "grid_mapping": mapping} | beside,
        )
    variables["reliability"] = xr.Variable(
        dims,
        flags.reshape(-1, y.size, x.size),
        {
            "standard_name": "status_flag",
            "long_name": "how far the value of the nearest line can be relied on",
            "flag_values": np.arange(len(MEANINGS), dtype=np.int8),
            "flag_meanings": " ".join(MEANINGS),
            "comment": "By the limits that the sections name.",
            "coverage_content_type": "qualityInformation",
            "grid_mapping": mapping,
        },
        {"_FillValue": np.int8(NO_DATA)},
    )
    levels = np.array(slicing.levels)
    variables |= _edges(axis, levels)
    variables["crs"] = xr.Variable((), np.int32(0), cf.map_crs_attributes(crs, x, y))
    axes = {
        axis: xr.Variable(axis, levels, cf.COORDINATES[axis]),
        "y": xr.Variable("y", y, cf.map_attributes("northing", crs)),
        "x": xr.Variable("x", x, cf.map_attributes("easting", crs)),
    }
    corners = (np.array([x[0], x[-1], x[0], x[-1]]), np.array([y[0], y[0], y[-1], y[-1]]))
    summary = (
        f"Slices of {sections[0][found[0]].attrs['long_name']} at {len(levels)} "
        f"{axis}s through {len(lines)} profiles. {_COMMENT}"
    )
    return xr.Dataset(
        variables,
        axes,
        provenance.attributes(summary)
        | _argument(lines)
        | cf.bounds(*corners, levels, crs, positive="up" if slicing.elevations else "down"),
    )


def write_map(folder: Path, dataset: xr.Dataset) -> tuple[Path, ...]:
    """Write ``map.nc`` and a ``map_<variable>.nc`` for every variable of it.

    A client that opens one of these shows the layer with no choice to make.

    Raises
    ------
    OutputError
        When the place cannot be written.
    """
    layers = [str(name) for name, variable in dataset.data_vars.items() if variable.ndim == 3]
    paths = [folder / "map.nc"]
    write_netcdf(dataset, paths[0])
    for name in layers:
        alone = dataset.drop_vars([other for other in layers if other != name]).copy()
        alone[name].attrs.pop("ancillary_variables", None)
        paths.append(folder / f"map_{name}.nc")
        write_netcdf(alone, paths[-1])
    return tuple(paths)


class _Slices:
    """A section cut at levels: fields over (level, column)."""

    def __init__(self, line: Line, slicing: Slicing) -> None:
        self.picture = line.picture
        elevation = line.picture["elevation"].to_numpy()
        known = line.picture.get("surface_altitude", xr.DataArray(np.inf))
        surface = np.broadcast_to(known.to_numpy(), len(line.trace))
        zero = np.where(np.isfinite(surface), surface, line.top)
        levels = np.array(slicing.levels)[:, np.newaxis]
        wanted = levels + 0 * zero if slicing.elevations else zero - levels
        row = (elevation[0] - wanted) / (elevation[0] - elevation[-1]) * (elevation.size - 1)
        self.inside = (row > -1e-6) & (row < elevation.size - 1 + 1e-6) & (wanted < surface + 1e-6)
        self.row = np.clip(row, 0, elevation.size - 1)

    def values(self, name: str) -> Array:
        """Linear between rows; NaN outside the ground."""
        field = carried_up(self._raster(name).astype(np.float64))
        above = np.minimum(self.row.astype(int), len(field) - 2)
        share = self.row - above
        upper, lower = (np.take_along_axis(field, above + below, axis=0) for below in (0, 1))
        return np.where(self.inside, upper * (1 - share) + lower * share, np.nan)

    def flags(self) -> NDArray[np.int8]:
        """Of the nearest rows."""
        field = carried_up(self._raster("reliability"))
        return np.take_along_axis(field, np.rint(self.row).astype(int), axis=0)

    def _raster(self, name: str) -> NDArray[Any]:
        values = self.picture[name].to_numpy()
        return values.reshape(len(values), -1)


def _beside(
    line: Line, x: Array, y: Array, reach: float, metres: float
) -> tuple[NDArray[np.int64], Array, Array]:
    """Flat indices of map nodes within reach of a line's positions, their places along it, how far off."""
    trace = line.trace
    low, high = trace.min(axis=0) - reach, trace.max(axis=0) + reach
    columns = np.flatnonzero((x >= low[0]) & (x <= high[0]))
    rows = np.flatnonzero((y >= low[1]) & (y <= high[1]))
    north, east = np.meshgrid(y[rows], x[columns], indexing="ij")
    index, place, aside = feet(trace, np.column_stack([east.ravel(), north.ravel()]), reach)
    if len(trace) > 1:
        # The section goes on beyond the positions, where nothing was measured: what is shown there shall
        # still be within reach of them.
        distance = line.picture["distance"].to_numpy()
        along = np.interp(place, np.arange(distance.size), distance)
        aside = np.hypot(aside, np.maximum(np.maximum(line.first - along, along - line.last), 0) / metres)
    flat = rows[index // columns.size] * x.size + columns[index % columns.size]
    return flat, place, aside


def _between(field: Array, place: Array) -> Array:
    """A field over (level, column) linear between columns, at places counted in columns."""
    if field.shape[1] == 1:
        return np.repeat(field, place.size, axis=1)
    left = np.minimum(place.astype(int), field.shape[1] - 2)
    share = place - left
    return np.asarray(field[:, left] * (1 - share) + field[:, left + 1] * share)


def _rounded(values: Array, bits: int) -> NDArray[np.float32]:
    """As float32 with a mantissa of few bits: the noise of the last ones is what does not compress."""
    mantissa, exponent = np.frexp(values)
    return np.asarray(np.ldexp(np.rint(mantissa * 2**bits), exponent - bits), dtype=np.float32)


def _edges(axis: str, levels: Array) -> dict[str, xr.Variable]:
    """Names and values of both edges of every slice, on the slices' axis."""
    half = np.diff(levels) / 2 if levels.size > 1 else np.zeros(1)
    half = np.r_[half[:1], half, half[-1:]][: levels.size + 1]
    top, bottom = levels - half[:-1], levels + half[1:]
    if axis == "depth":
        top = np.maximum(top, 0.0)
    said = {"units": "m", "coverage_content_type": "auxiliaryInformation"}
    return {
        f"{axis}_{name}": xr.Variable(axis, edge, {"long_name": f"{name} of the slice, as {axis}"} | said)
        for name, edge in (("top", top), ("bottom", bottom))
    }


def _argument(lines: Sequence[Line]) -> dict[str, str]:
    """What argues the answers behind a map, a sentence each."""
    return {"profiles": "\n".join(f"{line.name}: {_argued(line.picture)}" for line in lines)}


def _argued(section: xr.Dataset) -> str:
    said = section.attrs
    order = f", order {said['order']:.2g}" if "order" in said else ""
    return (
        f"{said['verdict']}{order}; {said['chosen_rule']} stops at iteration {said['chosen_iteration']:.3g}"
    )


def nice(length: float) -> float:
    """The next length up in the series 1, 2, 5, 10, ...

    Examples
    --------
    >>> [nice(x) for x in (0.5, 0.3, 6.0, 20.0)]
    [0.5, 0.5, 10.0, 20.0]
    """
    ten = 10.0 ** math.floor(math.log10(length))
    return next(float(f"{k * ten:.6g}") for k in (1, 2, 5, 10) if k * ten >= length * (1 - 1e-9))
