"""A nodal field as a picture: the function itself, not its cells.

The field is bilinear between its nodes, so it is resampled as such to an opaque image that ends at
the outermost nodes. Unreliable ground is blended with paper before it becomes an image, because an
alpha channel gets lost on the way to PDF, and hatched on top.
"""

from __future__ import annotations

import numpy as np
from matplotlib import colormaps
from matplotlib.artist import Artist
from matplotlib.axes import Axes
from matplotlib.colors import Colormap, Normalize, to_rgb
from matplotlib.patches import Polygon
from numpy.typing import NDArray

from stillground.products.figures.sheet import INK, PAPER
from stillground.products.raster import Surface, altitude
from stillground.products.reliability import MESH_DEPENDENT, NO_DATA, POORLY_COVERED, RELIABLE
from stillground.protocols import Array, GroundProperty

FIELD_COLOURS = colormaps["cividis"]
FADE = 0.68
HATCHES = {POORLY_COVERED: "////", MESH_DEPENDENT: "...."}


def shown(seen: GroundProperty, values: Array) -> tuple[Array, str, str]:
    """Values as people read them, with long name and units: the reciprocal where there is one."""
    if seen.reciprocal is None:
        return values, seen.long_name, seen.units
    _, units, long_name = seen.reciprocal
    return 1 / values, long_name, units


def colour_scale(values: Array, flags: NDArray[np.int8]) -> Normalize:
    """The middle 99 % of the reliable ground's values, so that wild corners do not flatten the rest."""
    used = values[flags == RELIABLE]
    low, high = np.percentile(used if used.size else values, [0.5, 99.5])
    spread = max(high - low, 1e-6 * abs(high)) or 1.0
    return Normalize(low, low + spread)


def draw_field(
    axes: Axes,
    nodes: tuple[Array, ...],
    values: Array,
    scale: Normalize,
    *,
    flags: NDArray[np.int8] | None,
    surface: Surface | None,
    pixels: int,
    colours: Colormap = FIELD_COLOURS,
) -> None:
    """Draw a field on (distance, elevation) with equal scales both ways.

    Parameters
    ----------
    axes : Axes
    nodes : tuple of two arrays
        Distance and elevation of the nodes, m, ascending.
    values : array, nodal field
    scale : Normalize
    flags : array of int8, nodal field, or None
        From `reliability`; what is not reliable is faded and hatched.
    surface : pair of arrays or None
        Nothing is drawn above it, and its line is.
    pixels : int
        Of the image, along its longer side.
    colours : Colormap
    """
    distance, elevation = nodes
    low, high = (distance[0], elevation[0]), (distance[-1], elevation[-1])
    across, up = high[0] - low[0], high[1] - low[1]
    per_metre = pixels / max(across, up)
    shape = (max(2, round(across * per_metre)), max(2, round(up * per_metre)))

    colour = colours(scale(_resampled(values, shape)))[..., :3]
    if flags is not None:
        flags = _carried_up(flags)
        veil = FADE * _resampled(np.isin(flags, list(HATCHES)).astype(float), shape)[..., np.newaxis]
        colour = colour * (1 - veil) + np.array(to_rgb(PAPER)) * veil
    image = axes.imshow(
        np.round(255 * colour).astype(np.uint8).swapaxes(0, 1),
        extent=(low[0], high[0], low[1], high[1]),
        origin="lower",
        aspect="equal",
        interpolation="none",
    )
    artists: list[Artist] = [image]
    if flags is not None:
        for flag, hatch in HATCHES.items():
            here = (flags == flag).astype(float)
            if here.any():
                artists.append(
                    axes.contourf(distance, elevation, here.T, [0.5, 1.5], colors="none", hatches=[hatch])
                )
    if surface is not None:
        corners = np.unique(np.concatenate([np.clip(surface[0], low[0], high[0]), [low[0], high[0]]]))
        top = altitude(corners, surface)
        outline = np.column_stack([np.r_[corners, high[0], low[0]], np.r_[top, low[1] - up, low[1] - up]])
        below = Polygon(outline, transform=axes.transData)
        for artist in artists:
            artist.set_clip_path(below)
        axes.plot(corners, top, color=INK, lw=1.2, clip_on=False)
    axes.set(xlim=(low[0], high[0]), ylim=(low[1], high[1]))
    axes.locator_params(steps=[1, 2, 5, 10])
    axes.grid(visible=False)


def _carried_up(flags: NDArray[np.int8]) -> NDArray[np.int8]:
    """Flags of the uppermost ground carried on above it, lest the veil thins out towards the surface."""
    top = np.maximum((flags != NO_DATA).sum(axis=1) - 1, 0)
    return np.where(flags == NO_DATA, np.take_along_axis(flags, top[:, np.newaxis], axis=1), flags)


def _resampled(field: Array, shape: tuple[int, int]) -> Array:
    """The bilinear function at the centres of pixels that fill the extent of the nodes."""
    for n in shape:
        at = (np.arange(n) + 0.5) / n * (field.shape[0] - 1)
        before = np.minimum(at.astype(int), field.shape[0] - 2)
        weight = (at - before)[:, np.newaxis]
        field = (field[before] * (1 - weight) + field[before + 1] * weight).T
    return field
