"""A nodal field as a picture: the function itself, not its cells.

The field is bilinear between its nodes, so it is resampled as such to an opaque image that ends at
the outermost nodes. Unreliable ground is blended with paper before it becomes an image, because an
alpha channel gets lost on the way to PDF, and hatched on top.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from matplotlib import colormaps
from matplotlib.artist import Artist
from matplotlib.axes import Axes
from matplotlib.colors import Colormap, Normalize, to_rgb
from matplotlib.figure import Figure
from matplotlib.patches import Patch, Polygon
from numpy.typing import NDArray

from stillground.products.figures.aspect import exaggeration, proportions
from stillground.products.figures.sheet import FOOT, INK, PAPER
from stillground.products.raster import Surface, altitude, carried_up, raster
from stillground.products.reading import read_as
from stillground.products.reliability import MESH_DEPENDENT, POORLY_COVERED, RELIABLE
from stillground.products.units import unit_text
from stillground.protocols import Array, GroundProperty

FIELD_COLOURS = colormaps["cividis"]
FADE = 0.68
HATCHES = {POORLY_COVERED: "////", MESH_DEPENDENT: "...."}
HATCH_NAMES = {POORLY_COVERED: "poorly covered", MESH_DEPENDENT: "depends on the grid"}


def shown_name(seen: GroundProperty) -> tuple[str, str]:
    """Name and units of what people read, as ``velocity`` and ``m s⁻¹``; no units for pure numbers."""
    name, units = read_as(seen)
    return name.replace("_", " "), unit_text(units)


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
    lines: Sequence[float] = (),
) -> None:
    """Draw a field on (distance, elevation), its elevation exaggerated where the section is long and thin.

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
    lines : sequence of float, ascending
        Values to draw lines of.
    """
    distance, elevation = nodes
    low, high = (distance[0], elevation[0]), (distance[-1], elevation[-1])
    across, up = proportions(nodes)
    per_metre = pixels / max(across, up)
    shape = (max(2, round(across * per_metre)), max(2, round(up * per_metre)))

    colour = colours(scale(resampled(values, shape)))[..., :3]
    if flags is not None:
        # Up to above the surface, lest the veil thins out towards it.
        flags = carried_up(raster(flags))[::-1].T
        veil = FADE * resampled(np.isin(flags, list(HATCHES)).astype(float), shape)[..., np.newaxis]
        colour = colour * (1 - veil) + np.array(to_rgb(PAPER)) * veil
    image = axes.imshow(
        np.round(255 * colour).astype(np.uint8).swapaxes(0, 1),
        extent=(low[0], high[0], low[1], high[1]),
        origin="lower",
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
    if any(values.min() < line < values.max() for line in lines):
        artists.append(axes.contour(distance, elevation, values.T, lines, colors=INK, linewidths=0.8))
    frame_ground(axes, nodes, artists, surface)


def frame_ground(
    axes: Axes, nodes: tuple[Array, ...], artists: Sequence[Artist], surface: Surface | None
) -> None:
    """Frame the extent of the nodes in its proportions, and cut what is drawn off at the surface."""
    distance, elevation = nodes
    low, high = (distance[0], elevation[0]), (distance[-1], elevation[-1])
    if surface is not None:
        corners = np.unique(np.concatenate([np.clip(surface[0], low[0], high[0]), [low[0], high[0]]]))
        top = altitude(corners, surface)
        outline = np.column_stack([np.r_[corners, high[0], low[0]], np.r_[top, low[1] - 1, low[1] - 1]])
        below = Polygon(outline, transform=axes.transData)
        for artist in artists:
            artist.set_clip_path(below)
        axes.plot(corners, top, color=INK, lw=1.2, clip_on=False)
    axes.set(xlim=(low[0], high[0]), ylim=(low[1], high[1]), aspect=exaggeration(nodes))
    axes.locator_params(steps=[1, 2, 5, 10])
    axes.grid(visible=False)


def hatch_key(figure: Figure, flags: NDArray[np.int8], others: Sequence[Artist] = ()) -> None:
    """What hatches mean, where there are any, at the foot of the sheet, after other signs of the picture."""
    key = [
        *others,
        *(
            Patch(facecolor=PAPER, edgecolor="#8e979d", hatch=HATCHES[flag], label=name, lw=0.4)
            for flag, name in HATCH_NAMES.items()
            if (flags == flag).any()
        ),
    ]
    if key:
        figure.legend(
            handles=key,
            loc="lower center",
            bbox_to_anchor=(0.5, (FOOT + 0.05) / figure.get_figheight()),
            # One row holds four; more would leave the sheet.
            ncols=len(key) if len(key) <= 4 else -(-len(key) // 2),
            handletextpad=0.5,
            columnspacing=1.6,
        )


def resampled(field: Array, shape: tuple[int, int]) -> Array:
    """The bilinear function at the centres of pixels that fill the extent of the nodes."""
    for n in shape:
        at = (np.arange(n) + 0.5) / n * (field.shape[0] - 1)
        before = np.minimum(at.astype(int), field.shape[0] - 2)
        weight = (at - before)[:, np.newaxis]
        field = (field[before] * (1 - weight) + field[before + 1] * weight).T
    return field
