"""``<profile>_pattern.nc``: synthetic patterns through the survey, what went in and what came back."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import xarray as xr

from stillground.products.netcdf import write_netcdf
from stillground.products.provenance import Provenance
from stillground.products.raster import Surface, coordinates, ground, map_variable
from stillground.protocols import Array, Field, Pattern

BACK = 0.5
"""Share of a body from which on it counts as come back."""

_FIELDS = {
    "truth": ("pattern that went in, over its amplitude", ""),
    "returned": ("what came back of the pattern, over its amplitude", ""),
    "share": (
        "share of the pattern that came back, locally",
        "Regression of what came back on what went in, over about the pattern's size.",
    ),
}
_CAUTION = "One exercise of the survey and no measure of its resolution: it depends on how a pattern falls."


def pattern_dataset(
    name: str,
    patterns: tuple[Pattern, ...],
    axes: tuple[Array, ...],
    *,
    surface: Surface | None,
    provenance: Provenance,
) -> xr.Dataset:
    """Patterns as a dataset.

    Parameters
    ----------
    name : str
        Of the profile.
    patterns : tuple of Pattern
        At least one.
    axes : tuple of array
        Nodes of the patterns: (distance, elevation), or (elevation,), m.
    surface : pair of arrays (distance, elevation), m, or None
        Everything is NaN above it.
    provenance : Provenance

    Returns
    -------
    xarray.Dataset
        ``truth``, ``returned`` and ``share`` over (pattern, elevation, distance) with the coordinates
        ``pattern_name`` and ``pattern_size``, m; where there are bodies, ``smallest_size(elevation,
        distance)``, m. ``set_index(pattern=["pattern_name", "pattern_size"])`` makes patterns selectable.
    """
    inside = ground(axes, surface)
    quality = {"coverage_content_type": "qualityInformation"}
    variables = {}
    for field, (long_name, comment) in _FIELDS.items():
        said = quality | ({"comment": comment} if comment else {})
        maps = [
            map_variable(Field(field, getattr(pattern, field), "1", long_name), inside, said)
            for pattern in patterns
        ]
        values = np.stack([one.to_numpy() for one in maps])
        variables[field] = xr.Variable(("pattern", *maps[0].dims), values, maps[0].attrs)
    if any(pattern.name == "bodies" for pattern in patterns):
        smallest = Field(
            "smallest_size", smallest_size(patterns), "m", "smallest size of bodies that come back here"
        )
        said = {"comment": f"Of the sizes tried, with a share of at least {BACK:g}; none where missing."}
        variables[smallest.name] = map_variable(smallest, inside, said | quality)

    names = np.array([pattern.name for pattern in patterns], dtype=object)
    sizes = np.array([pattern.size for pattern in patterns])
    labels = {
        "pattern_name": xr.Variable("pattern", names, {"long_name": "kind of pattern"}),
        "pattern_size": xr.Variable("pattern", sizes, {"long_name": "size of the pattern", "units": "m"}),
    }
    labels["pattern_name"].encoding["dtype"] = "S1"
    tried = ", ".join(f"{size:g}" for size in np.unique(sizes))
    summary = f"Synthetic patterns of {tried} m through the survey of profile {name} and its stop. {_CAUTION}"
    return xr.Dataset(variables, coordinates(axes) | labels, provenance.attributes(summary))


def smallest_size(patterns: tuple[Pattern, ...]) -> Array:
    """The least size of the bodies with a share of at least `BACK`, m, NaN where none; a nodal field."""
    smallest = np.full(patterns[0].share.shape, np.nan)
    for pattern in patterns:
        if pattern.name == "bodies":
            smallest = np.where(pattern.share >= BACK, np.fmin(smallest, pattern.size), smallest)
    return smallest


def write_pattern(folder: Path, name: str, dataset: xr.Dataset) -> Path:
    """Write ``<name>_pattern.nc`` into ``folder``; `OutputError` when the place cannot be written."""
    path = folder / f"{name}_pattern.nc"
    write_netcdf(dataset, path)
    return path
