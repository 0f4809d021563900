"""The survey as a figure, before any reconstruction: who sees what, and what the data say at first sight."""

from __future__ import annotations

from collections.abc import Mapping
from itertools import cycle

import numpy as np
from matplotlib.cm import ScalarMappable
from matplotlib.collections import LineCollection
from matplotlib.colors import LinearSegmentedColormap
from matplotlib.figure import Figure
from numpy.typing import NDArray

from stillground.products.figures.aspect import elevation_label, proportions
from stillground.products.figures.curves import draw_curve, frame_column
from stillground.products.figures.field import colour_scale, draw_field, shown_name
from stillground.products.figures.positions import draw_positions
from stillground.products.figures.sheet import (
    FOOT,
    HEADING,
    INK,
    MARGIN,
    MUTED,
    RUST,
    TEAL,
    panel,
    sheet,
    styled,
)
from stillground.products.raster import Surface, ground
from stillground.products.reading import shown
from stillground.products.units import labelled
from stillground.protocols import Array, Field, GroundProperty, Integers

# Not the colours of the ground's properties: coverage says how well, not what.
COVERAGE_COLOURS = LinearSegmentedColormap.from_list("coverage", ["#fffefb", "#bcd3cf", TEAL])
MOST_RAYS = 2000
PICTURE = (3.0, 4.3)
LONG, WHOLE, PLOT_HEIGHT, FLAT = 5.95, 6.45, 2.2, 0.5
"""Widths of a flat section and of all plots below it and their height, inches; and what is flat: lower than
this share of its room."""
MARKS = (("o", TEAL), ("^", RUST), ("s", INK), ("D", MUTED))


@styled
def survey_figure(
    profile: str,
    *,
    paths: tuple[Array, Array] | None,
    positions: Mapping[str, Array],
    apparent: Array,
    against: Mapping[str, Array],
    apart: Mapping[str, NDArray[np.bool_]],
    seen: GroundProperty,
    nodes: tuple[Array, ...],
    coverage: Field,
    surface: Surface | None,
) -> Figure:
    """The ways of the data, or their positions, over the coverage; and the apparent property.

    Parameters
    ----------
    profile : str
    paths : pair of array, shape (n_data, n_axes) each, or None
        Both ends of every datum's way, m; in a column they are not drawn.
    positions : mapping of str to array, shape (n, n_axes)
    apparent : array, shape (n_data,)
        The property that would explain each datum alone, in the units of ``seen``.
    against : mapping of str to array, shape (n_data,)
        What it is drawn against, by names with units.
    apart : mapping of str to array of bool, shape (n_data,)
        Sorts of data to tell apart, by name; none where there is one sort.
    seen : GroundProperty
    nodes : tuple of array
        Distance and elevation of the coverage's nodes, or elevation alone, m, ascending.
    coverage : Field
    surface : pair of arrays (distance, elevation), m, or None
    """
    n_data = apparent.size
    drawn = np.unique(np.linspace(0, n_data - 1, MOST_RAYS).astype(int))
    said = (
        ""
        if drawn.size == n_data or paths is None or len(nodes) == 1
        else f", {drawn.size} of their rays drawn"
    )
    covered = labelled(coverage.long_name, coverage.units)
    bottom = FOOT + 0.75
    n_plots = max(len(against), 1)
    flat = len(nodes) == 2 and _height(nodes, PICTURE[0]) < FLAT * PICTURE[1]
    if flat:
        # The section above and the plots below it, side by side.
        width = LONG
        body = _height(nodes, LONG) + 0.75 + PLOT_HEIGHT
        across, up = (WHOLE - 0.75 * (n_plots - 1)) / n_plots, PLOT_HEIGHT
        plots = [(0.75 + i * (across + 0.75), bottom, across, up) for i in range(n_plots)]
    else:
        width, body = PICTURE
        up = (body + 0.75) / n_plots - 0.75
        plots = [(5.05, bottom + (n_plots - 1 - i) * (up + 0.75), 2.15, up) for i in range(n_plots)]
    figure = sheet(
        7.4,
        bottom + body + HEADING + 0.2,
        f"{profile}: survey",
        f"{n_data} data{said}, {'beside' if len(nodes) == 1 else 'over'} {covered}",
    )

    if len(nodes) == 1:
        axes = panel(figure, 0.65, bottom, *PICTURE)
        axes.fill_betweenx(nodes[0], 0, coverage.values, color=COVERAGE_COLOURS(0.5), lw=0)
        draw_curve(axes, nodes[0], coverage.values, flags=None, colour=TEAL)
        frame_column(axes, nodes[0], surface)
        axes.set_xlim(0, None)
        axes.set_xlabel(covered)
        draw_positions(axes, positions)
        axes.set_ylabel(elevation_label(nodes))
    else:
        _section(figure, (bottom + body, width), paths, positions, drawn, nodes, coverage, surface)

    apparent = shown(seen, apparent)[0]
    known = apparent[np.isfinite(apparent)]
    name, units = shown_name(seen)
    label = labelled(f"apparent {name}", units)
    sorts = apart or {"": np.ones(n_data, dtype=bool)}
    for place, (beside, values) in zip(plots, against.items(), strict=False):
        axes = panel(figure, *place)
        for (sort, those), (marker, colour) in zip(sorts.items(), cycle(MARKS), strict=False):
            axes.plot(
                values[those],
                apparent[those],
                marker,
                ms=2.8,
                color=colour,
                alpha=0.45,
                mew=0,
                label=sort or None,
            )
        axes.set(xlabel=beside, ylabel=label)
        if known.size:
            axes.axhline(np.median(known), color=INK, lw=0.8, ls=(0, (5, 3)), label="median")
    if against and (apart or known.size):
        # Lines without a label of their own begin with an underscore.
        signs = [line for line in figure.axes[-1].lines if not str(line.get_label()).startswith("_")]
        figure.legend(
            handles=signs,
            loc="lower right",
            bbox_to_anchor=(1 - MARGIN / 7.4, (FOOT - 0.05) / figure.get_figheight()),
            borderaxespad=0,
            ncols=len(signs),
            markerscale=1.6,
        )
    return figure


def _height(nodes: tuple[Array, ...], width: float) -> float:
    """Of a section drawn so wide, inches."""
    across, up = proportions(nodes)
    return width * up / across


def _section(
    figure: Figure,
    corner: tuple[float, float],
    paths: tuple[Array, Array] | None,
    positions: Mapping[str, Array],
    drawn: Integers,
    nodes: tuple[Array, ...],
    coverage: Field,
    surface: Surface | None,
) -> None:
    """The section under its top, ``corner[0]``, at most so wide as ``corner[1]``, inches."""
    top, widest = corner
    across, up = proportions(nodes)
    inches = min(widest / across, PICTURE[1] / up)
    width, height = across * inches, up * inches
    place = (0.75, top - height, width, height)
    axes = panel(figure, *place)
    scale = colour_scale(coverage.values, np.where(ground(nodes, surface), 0, 1).astype(np.int8))
    draw_field(
        axes, nodes, coverage.values, scale, flags=None, surface=surface, pixels=500, colours=COVERAGE_COLOURS
    )
    if paths is not None:
        rays = list(np.stack([end[drawn] for end in paths], axis=1))
        axes.add_collection(LineCollection(rays, colors=INK, linewidths=0.3, alpha=0.25), autolim=False)
    draw_positions(axes, positions)
    axes.set(xlabel="distance (m)", ylabel=elevation_label(nodes))
    bar = figure.colorbar(
        ScalarMappable(scale, COVERAGE_COLOURS), cax=panel(figure, 0.75 + width + 0.1, place[1], 0.12, height)
    )
    bar.outline.set_linewidth(0.5)
