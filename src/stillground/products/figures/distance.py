"""The data against distance along the line, one curve for each source: first arrivals as people read them."""

from __future__ import annotations

from itertools import cycle
from typing import Any

import numpy as np
from matplotlib import rcParams
from matplotlib.figure import Figure
from matplotlib.lines import Line2D

from stillground.counted import counted
from stillground.products.data_curves import DataCurves
from stillground.products.figures.positions import draw_starts, position_key
from stillground.products.figures.sheet import FOOT, HEADING, INK, MARGIN, RUST, panel, sheet, styled
from stillground.products.units import labelled, unit_text, with_unit

_WIDTH, _HEIGHT = 6.5, 3.9


@styled
def distance_figure(profile: str, curves: DataCurves) -> Figure:
    """Observed data with their errors, sources at the foot, and what an answer predicts, if there is one.

    Parameters
    ----------
    profile : str
    curves : DataCurves
        Of many, every so many are drawn.
    """
    drawn = curves.drawn
    shown = np.isin(curves.number, drawn)
    bottom = FOOT + 0.75
    figure = sheet(7.4, bottom + _HEIGHT + HEADING, f"{profile}: {curves.datum} against distance",
                   _said(curves))  # fmt: skip
    axes = panel(figure, 0.68, bottom, _WIDTH, _HEIGHT)
    colours = cycle(rcParams["axes.prop_cycle"].by_key()["color"])
    for number, colour in zip(drawn, colours, strict=False):
        for side in curves.branches(int(number)):
            at, observed = curves.distance[side], curves.observed[side]
            axes.errorbar(at, observed, curves.errors[side], fmt="none", ecolor=colour, elinewidth=0.8)
            axes.plot(at, observed, "o", ms=2.4, mew=0, color=colour)
            if curves.predicted is None:
                axes.plot(at, observed, color=colour, lw=0.5, alpha=0.5)
            else:
                axes.plot(at, curves.predicted[side], color=colour, lw=0.8)
    light = curves.light & shown
    ring: dict[str, Any] = {"marker": "o", "ms": 6.5, "mfc": "none", "mec": RUST, "mew": 1.0, "ls": ""}
    axes.plot(curves.distance[light], curves.observed[light], **ring, zorder=3)
    axes.set(xlabel=f"distance of the {curves.along} (m)", ylabel=labelled(curves.datum, curves.unit))
    if curves.observed.min() >= 0:
        axes.set_ylim(0, None)
    draw_starts(axes, curves.of, curves.starts[drawn])

    signs = [
        *position_key({curves.of: curves.starts}),
        Line2D([], [], color=INK, marker="o", ms=2.4, lw=0, label="observed"),
    ]
    if curves.predicted is not None:
        signs.append(Line2D([], [], color=INK, lw=0.8, label="predicted by the answer"))
    if light.any():
        signs.append(Line2D([], [], **ring, label="counts less than half"))
    figure.legend(
        handles=signs,
        loc="lower right",
        bbox_to_anchor=(1 - MARGIN / 7.4, (FOOT - 0.05) / figure.get_figheight()),
        borderaxespad=0,
        ncols=len(signs),
    )
    return figure


def _said(curves: DataCurves) -> str:
    n_curves, n_drawn = curves.numbers.size, curves.drawn.size
    low, high = (f"{end:.2g}" for end in (curves.errors.min(), curves.errors.max()))
    errors = with_unit(low if low == high else f"{low} to {high}", unit_text(curves.unit))
    some = "" if n_drawn == n_curves else f", {n_drawn} of them drawn"
    joined = "; lines join the data of one" if curves.predicted is None else ""
    return (
        f"{curves.observed.size} data of {counted(n_curves, curves.of, f'{curves.of}s')}{some}{joined}; "
        f"bars: one standard error, {errors}"
    )
