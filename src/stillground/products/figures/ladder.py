"""The ladder as a figure: does the answer stop changing as the spacing shrinks?"""

from __future__ import annotations

import numpy as np
from matplotlib.figure import Figure
from matplotlib.ticker import LogLocator, NullLocator

from stillground.percent import percent
from stillground.products.figures.aspect import exaggeration
from stillground.products.figures.curves import draw_curve, frame_column
from stillground.products.figures.field import colour_scale, draw_field
from stillground.products.figures.maps import GOOD_COLOURS, tiling
from stillground.products.figures.sheet import (
    FOOT,
    HEADING,
    LINE,
    MUTED,
    TEAL,
    fitted,
    panel,
    sheet,
    styled,
)
from stillground.products.ladder import rung_spacing
from stillground.products.raster import Surface, ground
from stillground.products.reading import shown
from stillground.products.reliability import NO_DATA, RELIABLE, reliability
from stillground.products.units import labelled
from stillground.protocols import Ladder, Result

MAPS = (3.7, 3.5)
GAP = (0.15, 0.34)


@styled
def ladder_figure(profile: str, result: Result, *, tolerance: float, surface: Surface | None) -> Figure:
    """Change between rungs against spacing, with the fitted and the expected order, and the rungs.

    Parameters
    ----------
    profile : str
    result : Result
        On axes (distance, elevation) or (elevation,).
    tolerance : float
        Of the refinement, relative to the anomaly.
    surface : pair of arrays (distance, elevation), m, or None
    """
    verdict = result.ladder.verdict
    body = MAPS[1] + 0.1
    bottom = FOOT + 0.5
    figure = sheet(
        7.4,
        bottom + body + HEADING + 0.1,
        f"{profile}: refinement ladder",
        f"{verdict.word.capitalize()}: {verdict.reason}",
        verdict.word,
    )
    _changes(figure, result.ladder, tolerance, (0.72, bottom, 2.55, body))
    index = result.ladder.index.index
    checked = "none" if index is None else f"{percent(index)} of the rms anomaly"
    _caption(figure, f"grid convergence index: {checked}", 0.72 + 2.55 / 2, 3.1)
    if len(result.axes) == 1:
        _curves(figure, result, surface, (4.1, bottom, 3.1, body))
    else:
        _rungs(figure, result, surface, tolerance, (3.55, bottom - 0.3))
    return figure


def _caption(figure: Figure, said: str, middle: float, room: float) -> None:
    """At the foot, in at most two lines of ``room`` inches about ``middle``."""
    across, up = figure.get_size_inches()
    shown_text = fitted(said, 7, "normal", room * 72, 2)
    figure.text(
        middle / across, (FOOT - 0.04) / up, shown_text, size=7, color=MUTED, ha="center", va="bottom"
    )


def _changes(
    figure: Figure, ladder: Ladder, tolerance: float, place: tuple[float, float, float, float]
) -> None:
    axes = panel(figure, *place)
    # A change belongs to the finer of its two rungs: what halving down to that spacing did.
    spacings = np.array([rung_spacing(rung) for rung in ladder.rungs])
    change = np.array(ladder.change)
    drawn = change > 0
    ends = spacings[1:] if spacings.size > 1 else spacings
    heights = np.append(change[drawn], tolerance)
    axes.set(
        xscale="log",
        yscale="log",
        xlim=(ends.min() / 1.35, ends.max() * 1.35),
        ylim=(heights.min() / 2.5, heights.max() * 2.5),
        xlabel="spacing of the finer rung (m)",
        ylabel="relative change",
    )
    axes.set_xticks(ends)
    axes.xaxis.set_minor_locator(NullLocator())
    axes.xaxis.set_major_formatter("{x:g}")
    axes.yaxis.set_major_locator(LogLocator(subs=(1, 2, 5)))
    axes.yaxis.set_minor_locator(NullLocator())
    axes.yaxis.set_major_formatter("{x:g}")
    axes.axhline(tolerance, color=MUTED, lw=1, ls=(0, (5, 3)))
    axes.annotate(
        f"tolerance {tolerance:g}",
        (1, tolerance),
        (0, -2),
        xycoords=("axes fraction", "data"),
        textcoords="offset points",
        ha="right",
        va="top",
        size=7,
        color=MUTED,
        bbox={"facecolor": axes.get_facecolor(), "lw": 0, "pad": 1},
    )
    if not drawn.any():
        axes.set_title("one rung: nothing to compare" if change.size == 0 else "no change at all")
        return
    axes.plot(spacings[1:][drawn], change[drawn], "o", color=TEAL, ms=6, zorder=4)
    along = np.array(axes.get_xlim())
    verdict = ladder.verdict
    said = []
    for order, name, style in (
        (verdict.order, "order {:.2g} (dashed)", "--"),
        (verdict.expected, "expected {:.2g} (dotted)" if verdict.expected else "no limit (dotted)", ":"),
    ):
        if order is not None and drawn[-1]:
            line = change[-1] * (along / spacings[-1]) ** order
            axes.plot(along, line, color=LINE, lw=1.2, ls=style)
            said.append(name.format(order))
    axes.set_title(", ".join(said), size=8)


def _rungs(
    figure: Figure,
    result: Result,
    surface: Surface | None,
    tolerance: float,
    corner: tuple[float, float],
) -> None:
    rungs = result.ladder.rungs
    flags = reliability(result, tolerance, ground(result.axes, surface))
    scale = colour_scale(shown(result.property, result.model)[0], flags)
    room = (MAPS[0], MAPS[1] + 0.3)
    tiles = tiling(len(rungs), result.axes, room, GAP)
    step = ((room[0] + GAP[0]) / tiles.columns, room[1] / tiles.rows)
    said = f"{shown(result.property, result.model)[1]}, colours as in the section"
    if (times := exaggeration(result.axes)) > 1:
        said += f", elevation {times} times exaggerated"
    _caption(figure, said, corner[0] + MAPS[0] / 2, MAPS[0])
    for i, rung in enumerate(rungs):
        row, column = divmod(i, tiles.columns)
        axes = panel(
            figure,
            corner[0] + column * step[0] + (step[0] - GAP[0] - tiles.width) / 2,
            corner[1] + (tiles.rows - 1 - row) * step[1] + (step[1] - GAP[1] - tiles.height) / 2,
            tiles.width,
            tiles.height,
        )
        draw_field(
            axes,
            rung.axes,
            shown(result.property, rung.model)[0],
            scale,
            flags=None,
            surface=surface,
            pixels=200,
        )
        axes.set(xticks=[], yticks=[])
        axes.spines[:].set_visible(False)
        axes.set_title(f"{rung_spacing(rung):g} m · {rung.n_nodes} nodes", size=7)


def _curves(
    figure: Figure,
    result: Result,
    surface: Surface | None,
    place: tuple[float, float, float, float],
) -> None:
    """Rungs over one another, the finest darkest: where only that one is seen, they agree."""
    rungs = result.ladder.rungs
    values, long_name, units = shown(result.property, result.model)
    scale = colour_scale(values, np.where(ground(result.axes, surface), RELIABLE, NO_DATA).astype(np.int8))
    axes = panel(figure, *place)
    shades = GOOD_COLOURS(np.linspace(0.4, 1.0, len(rungs)) if len(rungs) > 1 else [1.0])
    for rung, shade in zip(rungs, shades, strict=True):
        draw_curve(
            axes,
            rung.axes[0],
            shown(result.property, rung.model)[0],
            flags=None,
            colour=shade,
            label=f"{rung_spacing(rung):g} m · {rung.n_nodes} nodes",
        )
    frame_column(axes, result.axes[0], surface)
    low, high = float(scale.vmin or 0.0), float(scale.vmax or 0.0)
    room = 0.08 * (high - low)
    axes.set(
        xlim=(low - room, high + room),
        xlabel=labelled(long_name, units),
        ylabel="elevation (m)",
        title="the rungs over one another",
    )
    axes.legend(loc="best", frameon=True, facecolor=axes.get_facecolor(), edgecolor="none")
