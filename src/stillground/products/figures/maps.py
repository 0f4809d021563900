"""Maps of one extent side by side, as large as their room lets them, each with its scale below.

Fields of a column are drawn as curves, in the same places and on the same scales.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from matplotlib.axes import Axes
from matplotlib.cm import ScalarMappable
from matplotlib.colors import Colormap, LinearSegmentedColormap, Normalize
from matplotlib.figure import Figure
from numpy.typing import NDArray

from stillground.products.figures.aspect import elevation_label, proportions
from stillground.products.figures.curves import draw_curve, frame_column, hatch_column
from stillground.products.figures.field import draw_field
from stillground.products.figures.sheet import INK, TEAL, panel
from stillground.products.raster import Surface
from stillground.products.reading import shown_change
from stillground.products.reliability import RELIABLE
from stillground.protocols import Array, Result

GAP = (0.5, 1.12)
"""Beside a map for its ticks; and above and below it for title, ticks and scale, inches."""

BELOW, BELOW_CURVE = 0.84, 0.5
"""What of that is below, and less below a curve, which needs no scale, inches."""

CURVE = (2.4, 4.2)
"""Largest size of a column's panel, inches."""

PIXELS = 130
"""Of a map's image, an inch."""

# Not the colours of the ground's properties. Of errors the darkest are the worst, and the least still
# differ from paper, lest faded ground looks exact; of what is good the darkest is the best.
ERROR_COLOURS = LinearSegmentedColormap.from_list("error", ["#f3dfa0", "#dd8a3c", "#a33a12", "#46120a"])
GOOD_COLOURS = LinearSegmentedColormap.from_list("good", ["#f1efe6", "#a9c9c3", TEAL])


@dataclass(frozen=True)
class Tiling:
    """How equal maps stand: columns, rows, and the size of each map, inches."""

    columns: int
    rows: int
    width: float
    height: float


@dataclass(frozen=True)
class Map:
    """A nodal field with its title, the words at its scale, and lines of equal value."""

    title: str
    label: str
    values: Array
    scale: Normalize
    colours: Colormap
    lines: tuple[float, ...] = ()

    @property
    def darkest(self) -> tuple[float, ...]:
        """The colour that says most: that of a curve."""
        return tuple(min((self.colours(0.0), self.colours(1.0)), key=sum))


def tiling(
    n: int,
    nodes: tuple[Array, ...],
    room: tuple[float, float],
    gap: tuple[float, float],
    columns: Sequence[int] | None = None,
) -> Tiling:
    """The number of columns that draws ``n`` maps largest in a room.

    Parameters
    ----------
    n : int
    nodes : tuple of array
        Distance and elevation, m: the extent of each map; or elevation alone.
    room : pair of float
        Width and height of all, inches.
    gap : pair of float
        Kept between columns, and with each row, inches.
    columns : sequence of int, optional
        Numbers of columns to choose from; default all.
    """
    if len(nodes) == 1:
        width = (room[0] - (n - 1) * gap[0]) / n
        return Tiling(n, 1, min(width, CURVE[0]), min(room[1] - gap[1], CURVE[1]))
    across, up = proportions(nodes)

    def scale(columns: int) -> float:
        wide = (room[0] - (columns - 1) * gap[0]) / columns
        return min(wide / across, (room[1] / -(-n // columns) - gap[1]) / up)

    best = max(columns or range(1, n + 1), key=scale)
    return Tiling(best, -(-n // best), across * scale(best), up * scale(best))


def error_scale(result: Result, errors: Sequence[Array], flags: NDArray[np.int8]) -> Normalize:
    """One scale for all errors, in the unit shown: the darkest is the rms anomaly, or worse.

    So the colour says what an error means: where it is dark, what the section shows may be none.
    """
    used = [one[flags == RELIABLE] for one in errors]
    largest = max((float(np.percentile(one, 99.5)) for one in used if one.size), default=0.0)
    return Normalize(0.0, max(largest, shown_anomaly(result)) or 1.0)


def shown_anomaly(result: Result) -> float:
    """The rms anomaly in the unit shown."""
    typical = np.array(np.median(result.model))
    return float(shown_change(result.property, typical, np.array(result.anomaly)))


def draw_maps(
    figure: Figure,
    maps: Sequence[Map],
    nodes: tuple[Array, ...],
    tiles: Tiling,
    corner: tuple[float, float],
    *,
    flags: NDArray[np.int8],
    surface: Surface | None,
) -> None:
    """Draw maps row by row; ``corner`` is the lower left of all, inches, scales included."""
    below = BELOW if len(nodes) > 1 else BELOW_CURVE
    for i, one in enumerate(maps):
        row, column = divmod(i, tiles.columns)
        left = corner[0] + column * (tiles.width + GAP[0])
        bottom = corner[1] + (tiles.rows - 1 - row) * (tiles.height + GAP[1]) + below
        axes = panel(figure, left, bottom, tiles.width, tiles.height + BELOW - below)
        axes.set_title(one.title)
        if column == 0:
            axes.set_ylabel(elevation_label(nodes))
        if len(nodes) == 1:
            _draw_as_curve(axes, one, nodes[0], flags, surface)
            continue
        draw_field(
            axes,
            nodes,
            one.values,
            one.scale,
            flags=flags,
            surface=surface,
            pixels=round(PIXELS * max(tiles.width, tiles.height)),
            colours=one.colours,
            lines=one.lines,
        )
        axes.set_xlabel("distance (m)")
        bar = figure.colorbar(
            ScalarMappable(one.scale, one.colours),
            cax=panel(figure, left, bottom - 0.56, tiles.width, 0.1),
            orientation="horizontal",
        )
        bar.set_label(one.label, labelpad=1)
        bar.outline.set_linewidth(0.5)


def _draw_as_curve(
    axes: Axes, one: Map, elevation: Array, flags: NDArray[np.int8], surface: Surface | None
) -> None:
    hatch_column(axes, elevation, flags)
    for line in one.lines:
        axes.axvline(line, color=INK, lw=0.8)
    draw_curve(axes, elevation, one.values, flags=flags, colour=one.darkest)
    frame_column(axes, elevation, surface)
    axes.set(xlim=(one.scale.vmin, one.scale.vmax), xlabel=one.label)
