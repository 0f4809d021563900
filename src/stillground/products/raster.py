"""Nodal fields as rasters: elevation first and descending, distance along the rows.

Everywhere else a nodal field has elevation last and ascending; the turn is made here and nowhere
else, because a client shows a section with ascending elevation upside down.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any, TypeVar

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from stillground.products.cf import COORDINATES
from stillground.products.reliability import NO_DATA
from stillground.protocols import Array, Field

Surface = tuple[Array, Array]
"""Distance (ascending) and elevation of the ground surface, m, each of shape (n_points,)."""

Kind = TypeVar("Kind", bound=np.generic)


def dimensions(n_axes: int, suffix: str = "") -> tuple[str, ...]:
    """Names of a raster's dimensions: (elevation, distance), or (elevation,) for a column."""
    return tuple(f"{name}{suffix}" for name in ("elevation", "distance")[:n_axes])


def coordinates(axes: tuple[Array, ...], suffix: str = "") -> dict[str, xr.Variable]:
    """Coordinates of a raster by name, elevation descending."""
    values = (axes[-1][::-1], *axes[:-1])
    return {
        name: xr.Variable(name, along, COORDINATES[name.removesuffix(suffix)])
        for name, along in zip(dimensions(len(axes), suffix), values, strict=True)
    }


def raster(field: NDArray[Kind]) -> NDArray[Kind]:
    """The nodal field turned to (elevation descending, distance).

    Examples
    --------
    >>> raster(np.array([["near-low", "near-high"], ["far-low", "far-high"]]))
    array([['near-high', 'far-high'],
           ['near-low', 'far-low']], dtype='<U9')
    """
    return field.T[::-1]


def carried_up(rasters: NDArray[Kind]) -> NDArray[Kind]:
    """Values or flags of the uppermost ground carried on above it, shape (..., n_elevation, n_distance).

    Pictures are then whole up to the surface, where they are cut, and not in stairs.

    Examples
    --------
    >>> carried_up(np.array([[np.nan, 1.0], [2.0, 3.0]]))
    array([[2., 1.],
           [2., 3.]])
    """
    missing = rasters == NO_DATA if rasters.dtype.kind == "i" else np.isnan(rasters)
    uppermost = np.argmin(missing, axis=-2, keepdims=True)
    return np.where(missing, np.take_along_axis(rasters, uppermost, axis=-2), rasters)


def ground(axes: tuple[Array, ...], surface: Surface | None) -> NDArray[np.bool_]:
    """Which nodes lie in the ground, as a nodal field: all without a surface."""
    if surface is None:
        return np.ones([axis.size for axis in axes], dtype=bool)
    distance = axes[0] if len(axes) > 1 else np.zeros(1)
    below = np.greater_equal.outer(altitude(distance, surface) + 1e-9, axes[-1])
    return below.reshape([axis.size for axis in axes])


def altitude(distance: Array, surface: Surface) -> Array:
    """Elevation of the surface at ``distance``, m: linear between its points, constant beyond them."""
    return np.interp(distance, *surface)


def map_variable(
    field: Field, inside: NDArray[np.bool_], attributes: Mapping[str, Any], suffix: str = ""
) -> xr.Variable:
    """A named nodal field as a float32 raster variable, NaN outside the ground."""
    values = np.where(inside, field.values, np.nan).astype(np.float32)
    labels = {"long_name": field.long_name, "units": field.units}
    return xr.Variable(dimensions(values.ndim, suffix), raster(values), labels | dict(attributes))
