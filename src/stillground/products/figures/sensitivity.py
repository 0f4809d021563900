"""How far the answer hangs on what the user chose: lengths, smoothness, background."""

from __future__ import annotations

from matplotlib.colors import Normalize
from matplotlib.figure import Figure
from matplotlib.lines import Line2D

from stillground.products.figures.field import hatch_key, shown_name
from stillground.products.figures.maps import (
    ERROR_COLOURS,
    GAP,
    GOOD_COLOURS,
    Map,
    draw_maps,
    error_scale,
    tiling,
)
from stillground.products.figures.sheet import (
    FOOT,
    HEADING,
    INK,
    MUTED,
    TEAL,
    fitted,
    panel,
    sheet,
    styled,
)
from stillground.products.raster import Surface, ground
from stillground.products.reading import shown_change
from stillground.products.reliability import reliability
from stillground.products.units import labelled
from stillground.protocols import Result, Variation

ROOM = (3.8, 5.2)
WIDTH, STEP = 2.2, 0.42
"""Of the bars, and from one to the next, inches."""
CUTS = (0.1, 0.2)


@styled
def sensitivity_figure(profile: str, result: Result, *, tolerance: float, surface: Surface | None) -> Figure:
    """Change of the picture by variation, beside maps of the spread and the investigation index.

    Parameters
    ----------
    profile : str
    result : Result
        On axes (distance, elevation) or (elevation,), with ``sensitivity``.
    tolerance : float
        As for `picture_dataset`.
    surface : pair of arrays (distance, elevation), m, or None

    References
    ----------
    Oldenburg and Li (1999), Geophysics 64: the index and its cut-off, commonly 0.1 to 0.2.
    """
    sensitivity = result.sensitivity
    assert sensitivity is not None
    flags = reliability(result, tolerance, ground(result.axes, surface))
    name, units = shown_name(result.property)
    spread = shown_change(result.property, result.model, sensitivity.spread)
    maps = [
        Map(
            "Spread by lengths, smoothness",
            labelled(f"of {name}", units),
            spread,
            error_scale(result, [spread], flags),
            ERROR_COLOURS,
        ),
        Map(
            "Investigation index",
            "0 data, 1 background",
            sensitivity.investigation,
            Normalize(0, 1),
            GOOD_COLOURS.reversed(),
            CUTS,
        ),
    ]
    tiles = tiling(len(maps), result.axes, ROOM, GAP)
    bottom = FOOT + 0.42
    body = tiles.rows * (tiles.height + GAP[1])
    largest = max(sensitivity.variations, key=lambda varied: varied.distance)
    figure = sheet(
        7.4,
        bottom + max(body, STEP * len(sensitivity.variations) + 0.75) + HEADING,
        f"{profile}: what hangs on your choices",
        f"The picture moves most with {largest.name}: {100 * largest.distance:.0f} % of the rms anomaly. "
        f"Each variation stops at its own pick of {result.chosen.rule}",
    )
    top = figure.get_figheight() - HEADING - 0.28
    _bars(figure, sensitivity.variations, top)
    draw_maps(
        figure,
        maps,
        result.axes,
        tiles,
        (7.2 - tiles.columns * (tiles.width + GAP[0]) + GAP[0], top - body + 0.28),
        flags=flags,
        surface=surface,
    )
    cuts = " and ".join(f"{cut:g}" for cut in CUTS)
    hatch_key(figure, flags, [Line2D([], [], color=INK, lw=0.8, label=f"index {cuts}")])
    return figure


def _bars(figure: Figure, variations: tuple[Variation, ...], top: float) -> None:
    height = STEP * len(variations)
    axes = panel(figure, 0.4, top - height, WIDTH, height)
    at = [0.68 + i for i in range(len(variations))]
    distances = [100 * varied.distance for varied in variations]
    axes.barh(at, distances, 0.36, color=TEAL)
    for y, varied in zip(at, variations, strict=True):
        for x, text, side, colour in (
            (0.02, varied.name, "left", INK),
            (1.0, f"stop {varied.iteration:.3g}", "right", MUTED),
        ):
            axes.text(
                x,
                y - 0.3,
                fitted(text, 7.5, "normal", 105, 1),
                size=7.5,
                color=colour,
                ha=side,
                va="bottom",
                transform=axes.get_yaxis_transform(),
            )
    axes.set(
        xlim=(0, 1.1 * max(distances) or 1.0),
        ylim=(len(variations), 0),
        yticks=[],
        xlabel="% of the rms anomaly",
        title="Change by one setting",
    )
