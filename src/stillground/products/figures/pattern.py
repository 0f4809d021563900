"""Synthetic patterns as a figure: what went in, what came back, and the smallest size that does."""

from __future__ import annotations

from typing import Any

import numpy as np
from matplotlib import colormaps
from matplotlib.artist import Artist
from matplotlib.axes import Axes
from matplotlib.cm import ScalarMappable
from matplotlib.colors import Normalize
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.patches import Patch, Rectangle

from stillground.products.figures.aspect import elevation_label, proportions
from stillground.products.figures.curves import draw_curve, frame_column
from stillground.products.figures.field import HATCHES, draw_field, frame_ground
from stillground.products.figures.maps import GOOD_COLOURS, PIXELS, Tiling, tiling
from stillground.products.figures.sheet import FOOT, HEADING, MARGIN, MUTED, PAPER, TEAL, panel, sheet, styled
from stillground.products.pattern import BACK
from stillground.products.raster import Surface
from stillground.products.reliability import POORLY_COVERED
from stillground.protocols import Array, Pattern

COLOURS, SCALE = colormaps["PuOr_r"], Normalize(-1, 1)
WIDTH, TALLEST = 7.4, 6.4
GAP, PAIR = (0.06, 0.12), 0.14
"""Between maps, and added between two pairs of them, inches."""
NAMES, ABOVE, BAR = 1.05, 0.3, 0.72
"""Room for words before and above the maps and for the scale below, inches."""
SMALLEST, KEY = 1.75, 1.0
"""Width of the map of sizes where it stands beside the others, and room for words below it, inches."""
SAID = (
    "Synthetic patterns, as strong as the survey's own signal and with its errors, through the survey "
    "and its stop. One exercise and no measure of resolution: it depends on how a pattern falls"
)
CURVE, ROW = (0.78, 3.6), 7
"""Size of a column's panel, inches, and how many stand in a row."""


@styled
def pattern_figure(
    profile: str, patterns: tuple[Pattern, ...], axes: tuple[Array, ...], *, surface: Surface | None
) -> Figure:
    """What went in and what came back, size by size, and the smallest size of bodies that comes back.

    Parameters
    ----------
    profile : str
    patterns : tuple of Pattern
        Every name with every size; the map of sizes is drawn where there are ``bodies``.
    axes : tuple of array
        Distance and elevation of the patterns' nodes, or elevation alone, m.
    surface : pair of arrays (distance, elevation), m, or None
    """
    names = list(dict.fromkeys(pattern.name for pattern in patterns))
    ordered = sorted(patterns, key=lambda pattern: (pattern.size, names.index(pattern.name)))
    bodies = [pattern for pattern in ordered if pattern.name == "bodies"]
    if len(axes) == 1:
        return _column(profile, ordered, bodies, axes[0], surface)
    across, up = proportions(axes)
    beside = bool(bodies) and up > across

    room = WIDTH - NAMES - MARGIN - PAIR * (len(names) - 1) - (SMALLEST + 0.55 if beside else 0.0)
    tiles = tiling(2 * len(ordered), axes, (room, TALLEST), GAP, (2, 2 * len(names)))
    below = tiles.width * 2 * up / across + KEY + 0.3 if bodies and not beside else 0.0
    bottom = FOOT + below + BAR
    body = tiles.rows * (tiles.height + GAP[1])
    figure = sheet(
        WIDTH,
        bottom + body + ABOVE + HEADING,
        f"{profile}: what comes back",
        SAID,
    )
    _patterns(figure, ordered, axes, tiles, bottom, surface)
    if bodies:
        width = SMALLEST if beside else 2 * tiles.width
        height = width * up / across
        left = WIDTH - MARGIN - SMALLEST if beside else NAMES
        low = bottom + body - GAP[1] - height if beside else FOOT + KEY
        _smallest(panel(figure, left, low, width, height), bodies, axes, surface, 2 if beside else 6)
    return figure


def _patterns(
    figure: Figure,
    patterns: list[Pattern],
    nodes: tuple[Array, ...],
    tiles: Tiling,
    bottom: float,
    surface: Surface | None,
) -> None:
    pairs = tiles.columns // 2
    right = 0.0
    for i, pattern in enumerate(patterns):
        row, pair = divmod(i, pairs)
        low = bottom + (tiles.rows - 1 - row) * (tiles.height + GAP[1])
        for column, (values, said) in enumerate(((pattern.truth, "in"), (pattern.returned, "back"))):
            left = NAMES + (2 * pair + column) * (tiles.width + GAP[0]) + pair * PAIR
            axes = panel(figure, left, low, tiles.width, tiles.height)
            draw_field(
                axes,
                nodes,
                values,
                SCALE,
                flags=None,
                surface=surface,
                pixels=round(PIXELS * max(tiles.width, tiles.height)),
                colours=COLOURS,
            )
            axes.set(xticks=[], yticks=[])
            axes.spines[:].set_visible(False)
            if row == 0:
                named = f"{pattern.name} {said}" if pairs > 1 and column == 0 else said
                axes.set_title(named, size=7.5)
            right = max(right, left + tiles.width)
        if pair == 0:
            named = f"{pattern.size:g} m" if pairs > 1 else f"{pattern.name}\n{pattern.size:g} m"
            across, up = figure.get_size_inches()
            figure.text(
                (NAMES - 0.1) / across,
                (low + tiles.height / 2) / up,
                named,
                size=7.5,
                ha="right",
                va="center",
            )
    bar = figure.colorbar(
        ScalarMappable(SCALE, COLOURS),
        cax=panel(figure, NAMES, bottom - 0.22, right - NAMES, 0.1),
        orientation="horizontal",
        ticks=[-1, -0.5, 0, 0.5, 1],
    )
    bar.set_label("over the pattern's amplitude", labelpad=1)
    bar.outline.set_linewidth(0.5)


def _smallest(
    axes: Axes, bodies: list[Pattern], nodes: tuple[Array, ...], surface: Surface | None, columns: int
) -> None:
    """Areas where bodies come back, the smallest on top: shares are bilinear, and so are their limits."""
    shades = GOOD_COLOURS(np.linspace(1.0, 0.25, len(bodies)))
    (left, right), (low, high) = ((axis[0], axis[-1]) for axis in nodes)
    none: dict[str, Any] = {
        "facecolor": PAPER,
        "edgecolor": MUTED,
        "hatch": HATCHES[POORLY_COVERED],
        "lw": 0.4,
    }
    areas: list[Artist] = [axes.add_patch(Rectangle((left, low), right - left, high - low, **none))]
    areas += [
        axes.contourf(*nodes, body.share.T, [BACK, np.inf], colors=[shade])
        for body, shade in reversed(list(zip(bodies, shades, strict=True)))
        if body.share.max() >= BACK
    ]
    frame_ground(axes, nodes, areas, surface)
    axes.set(xlabel="distance (m)", ylabel=elevation_label(nodes), title="smallest bodies that come back")
    key = [
        Patch(facecolor=shade, label=f"{body.size:g} m") for body, shade in zip(bodies, shades, strict=True)
    ]
    key.append(Patch(**none, label="none"))
    axes.legend(
        handles=key,
        loc="upper center",
        bbox_to_anchor=(0.5, 0),
        bbox_transform=axes.transAxes,
        borderaxespad=4.5,
        ncols=columns,
        columnspacing=1.2,
        handletextpad=0.5,
    )


def _column(
    profile: str, patterns: list[Pattern], bodies: list[Pattern], elevation: Array, surface: Surface | None
) -> Figure:
    """What came back of each pattern over what went in, and where bodies of each size come back."""
    step = (CURVE[0] + 0.15, CURVE[1] + 0.75)
    n_panels = len(patterns) + bool(bodies)
    rows = -(-n_panels // ROW)
    bottom = FOOT + 0.75
    figure = sheet(
        WIDTH, bottom + rows * step[1] - 0.75 + HEADING + 0.35, f"{profile}: what comes back", SAID
    )

    def panel_at(number: int) -> Axes:
        row, column = divmod(number, ROW)
        axes = panel(figure, 0.7 + column * step[0], bottom + (rows - 1 - row) * step[1], *CURVE)
        axes.set_title(" ")
        if column:
            axes.tick_params(labelleft=False)
        else:
            axes.set_ylabel("elevation (m)")
        return axes

    for number, pattern in enumerate(patterns):
        axes = panel_at(number)
        draw_curve(axes, elevation, pattern.truth, flags=None, colour=MUTED, lw=0.7)
        draw_curve(axes, elevation, pattern.returned, flags=None, colour=TEAL)
        frame_column(axes, elevation, surface)
        axes.set(xlim=(-1.6, 1.6), xticks=[-1, 0, 1])
        axes.set_title(f"{pattern.name}\n{pattern.size:g} m", size=7)
    if bodies:
        axes = panel_at(len(patterns))
        for place, body in enumerate(bodies):
            back = body.share >= BACK
            axes.fill_betweenx(elevation, place + 0.1, place + 0.9, where=back, color=TEAL, lw=0)
        frame_column(axes, elevation, surface)
        axes.set(xlim=(0, len(bodies)), xlabel="size (m)")
        axes.set_xticks([place + 0.5 for place in range(len(bodies))], [f"{body.size:g}" for body in bodies])
        axes.set_title("bodies come\nback here", size=7)
    figure.legend(
        handles=[
            Line2D([], [], color=MUTED, lw=0.7, label="in"),
            Line2D([], [], color=TEAL, lw=1.6, label="back, over the pattern's amplitude"),
        ],
        loc="lower center",
        bbox_to_anchor=(0.5, (FOOT + 0.02) / figure.get_figheight()),
        ncols=2,
    )
    return figure
