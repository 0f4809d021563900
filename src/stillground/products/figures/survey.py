"""The survey as a figure, before any reconstruction: who sees what, and what the data say at first sight."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from matplotlib.cm import ScalarMappable
from matplotlib.collections import LineCollection
from matplotlib.colors import LinearSegmentedColormap
from matplotlib.figure import Figure

from stillground.products.figures.aspect import elevation_label, proportions
from stillground.products.figures.curves import draw_curve, frame_column
from stillground.products.figures.field import colour_scale, draw_field, shown_name
from stillground.products.figures.positions import draw_positions
from stillground.products.figures.sheet import FOOT, HEADING, INK, TEAL, panel, sheet, styled
from stillground.products.raster import Surface, ground
from stillground.products.reading import shown
from stillground.products.units import labelled
from stillground.protocols import Array, Field, GroundProperty, Integers

# Not the colours of the ground's properties: coverage says how well, not what.
COVERAGE_COLOURS = LinearSegmentedColormap.from_list("coverage", ["#fffefb", "#bcd3cf", TEAL])
MOST_RAYS = 2000
PICTURE = (3.1, 4.3)


@styled
def survey_figure(
    profile: str,
    *,
    paths: tuple[Array, Array] | None,
    positions: Mapping[str, Array],
    apparent: Array,
    against: Mapping[str, Array],
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
    bottom = FOOT + 0.5
    figure = sheet(
        7.4,
        bottom + PICTURE[1] + HEADING + 0.2,
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
        _section(figure, bottom, paths, positions, drawn, nodes, coverage, surface)

    apparent = shown(seen, apparent)[0]
    known = apparent[np.isfinite(apparent)]
    name, units = shown_name(seen)
    label = labelled(f"apparent {name}", units)
    rows = max(len(against), 1)
    height = (PICTURE[1] + 0.75) / rows - 0.75
    for row, (beside, values) in enumerate(against.items()):
        axes = panel(figure, 5.05, bottom + (rows - 1 - row) * (height + 0.75), 2.15, height)
        axes.plot(values, apparent, "o", ms=2.4, color=TEAL, alpha=0.4, mew=0)
        axes.set(xlabel=beside, ylabel=label)
        if known.size:
            axes.axhline(np.median(known), color=INK, lw=0.8, ls=(0, (5, 3)), label="median")
            axes.legend(loc="best", borderpad=0.1)
    return figure


def _section(
    figure: Figure,
    bottom: float,
    paths: tuple[Array, Array] | None,
    positions: Mapping[str, Array],
    drawn: Integers,
    nodes: tuple[Array, ...],
    coverage: Field,
    surface: Surface | None,
) -> None:
    across, up = proportions(nodes)
    inches = min(PICTURE[0] / across, PICTURE[1] / up)
    width, height = across * inches, up * inches
    place = (0.65, bottom + PICTURE[1] - height, width, height)
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
        ScalarMappable(scale, COVERAGE_COLOURS), cax=panel(figure, 0.65 + width + 0.1, place[1], 0.12, height)
    )
    bar.outline.set_linewidth(0.5)
