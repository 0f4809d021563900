"""The rehearsal as a figure: what each rule costs on synthetic ground under this survey."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.ticker import FixedLocator, NullLocator

from stillground.products.figures.badges import badge_of, draw_badge
from stillground.products.figures.sheet import (
    FOOT,
    HEADING,
    INK,
    MARGIN,
    MUTED,
    fitted,
    panel,
    sheet,
    styled,
)
from stillground.products.ratios import ratio_numbers
from stillground.protocols import Array, Rehearsal

STEP = 0.27
NAMES, COST, BETWEEN = 1.65, 0.75, 0.18
"""Room for the rules' names, for what they cost, and between two families, inches."""
WIDTH = 7.4
BAND = "#f1efe6"
FAMILIES = {"prior": "from the prior", "layers": "level layers", "described": "the described ground"}
TICKS = (1, 1.1, 1.2, 1.5, 2, 3, 5, 10, 20, 50, 100)


@styled
def rehearsal_figure(profile: str, rehearsal: Rehearsal, chosen: str) -> Figure:
    """Median, 90 % and worst ratio of every rule by family, best rules first, groups of equals in bands.

    Parameters
    ----------
    profile : str
    rehearsal : Rehearsal
    chosen : str
        The rule whose picture is the answer.
    """
    rules = [rule for group in rehearsal.groups for rule in group]
    rows = {rule: row for row, rule in enumerate(rules)}
    height = STEP * len(rules)
    bottom = FOOT + 0.8
    figure = sheet(
        WIDTH, bottom + height + HEADING + 0.3, f"{profile}: which rule to trust", _said(rehearsal, chosen)
    )
    backdrop = panel(figure, 0, bottom, WIDTH, height)
    backdrop.set(xlim=(0, WIDTH), ylim=(len(rules) - 0.5, -0.5))
    backdrop.set_axis_off()
    first = -0.5
    for number, group in enumerate(rehearsal.groups):
        if number % 2 == 0:
            backdrop.fill_betweenx([first, first + len(group)], MARGIN, WIDTH - MARGIN, color=BAND, lw=0)
        first += len(group)
    for rule, row in rows.items():
        weight = "bold" if rule == chosen else "normal"
        draw_badge(backdrop, 0.38, row, rule, chosen=rule == chosen)
        for x, text, side in (
            (0.55, fitted(rule, 7.5, "bold", 80, 1), "left"),
            (WIDTH - 0.3, f"{100 * rehearsal.cost[rule]:.0f} %", "right"),
        ):
            backdrop.text(x, row, text, size=7.5, weight=weight, ha=side, va="center_baseline")
    backdrop.text(WIDTH - 0.3, -0.72, "cost", size=8, color=MUTED, ha="right", va="baseline")

    families = rehearsal.ratios
    width = (WIDTH - NAMES - COST + BETWEEN) / len(families) - BETWEEN
    worst = max(float(family[rule].max()) for family in families.values() for rule in rules)
    for i, (family, ratios) in enumerate(families.items()):
        axes = panel(figure, NAMES + i * (width + BETWEEN), bottom, width, height)
        axes.set_facecolor("none")
        _axis(axes, worst, width)
        axes.set(ylim=(len(rules) - 0.5, -0.5), yticks=[], title=FAMILIES.get(family, family))
        axes.spines.left.set_visible(False)
        _dots(axes, ratios, rows)
    figure.text(
        (NAMES + WIDTH - COST) / 2 / WIDTH,
        (bottom - 0.38) / figure.get_figheight(),
        "error over the best iterate's",
        ha="center",
        va="baseline",
    )
    figure.legend(
        handles=[
            Line2D([], [], marker="o", ms=5, color=INK, ls="", label="median"),
            Line2D([], [], marker="o", ms=4.5, mfc="none", color=INK, ls="", label="90 % stay under"),
            Line2D([], [], marker="|", ms=7, color=INK, ls="", label="worst"),
        ],
        loc="lower center",
        bbox_to_anchor=(0.5, (FOOT + 0.02) / figure.get_figheight()),
        ncols=3,
        handletextpad=0.3,
    )
    return figure


def _said(rehearsal: Rehearsal, chosen: str) -> str:
    twins = next(ratios.size for family in rehearsal.ratios.values() for ratios in family.values())
    said = f"{twins} synthetic grounds a family under this survey. Rules in one band cannot be told apart"
    for place, group in enumerate(rehearsal.groups, start=1):
        if chosen in group:
            said += f": {chosen}, the chosen one, is in band {place} of {len(rehearsal.groups)}"
    said += ". Cost: mean loss in a rule's worst family"
    if rehearsal.left_out:
        said += f". Not applicable here: {', '.join(rehearsal.left_out)}"
    return said


def _axis(axes: Axes, worst: float, width: float) -> None:
    end = max(worst, 1.2) * 1.06
    axes.set(xscale="log", xlim=(1 / end**0.03, end))
    per_decade = width / np.log10(end)
    shown: list[float] = []
    for tick in TICKS:
        if tick < end and (not shown or np.log10(tick / shown[-1]) * per_decade > 0.26):
            shown.append(tick)
    axes.xaxis.set_major_locator(FixedLocator(shown))
    axes.xaxis.set_minor_locator(NullLocator())
    axes.xaxis.set_major_formatter("{x:g}")


def _dots(axes: Axes, ratios: Mapping[str, Array], rows: Mapping[str, int]) -> None:
    at, colours = list(rows.values()), [badge_of(rule).colour for rule in rows]
    median, ninety, worst = (
        [ratio_numbers(ratios[rule])[key] for rule in rows] for key in ("median", "p90", "worst")
    )
    axes.hlines(at, median, worst, colors=colours, lw=1)
    axes.scatter(worst, at, 49, colours, marker="|", lw=1.4)
    axes.scatter(ninety, at, 22, [axes.figure.get_facecolor()], edgecolors=colours, lw=1)
    axes.scatter(median, at, 30, colours, clip_on=False)
