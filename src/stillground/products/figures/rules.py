"""The stopping rules as a figure: what each saw along the iteration, and where it would stop."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from itertools import cycle

import numpy as np
from matplotlib.axes import Axes
from matplotlib.collections import LineCollection
from matplotlib.figure import Figure
from matplotlib.ticker import LogLocator, NullLocator

from stillground.products.figures.badges import badge_of, draw_badge, spread
from stillground.products.figures.sheet import (
    FOOT,
    HEADING,
    INK,
    LINE,
    MUTED,
    fitted,
    panel,
    sheet,
    styled,
)
from stillground.protocols import Array, Choice, History, Result, RuleOptions

WIDTH, HEIGHT = 2.95, 1.6
BESIDE, BELOW = 0.7, 0.45
RAIL, BADGE = 0.42, 0.175
"""Height of the row of badges above the panels, and room for one badge, inches."""
KEY_STEP = 0.185
EDGE = 0.03
MOST_SUBDIVIDED = 1e4
TICKS = (0, 1, 2, 5, 10, 20, 50, 100, 200, 500, 1000, 2000, 5000, 10_000)

# Kolmogorov and Smirnov: white noise stays under it in 95 % of cases.
WHITE = 1.36


@dataclass(frozen=True)
class Curves:
    """What one panel draws against the iteration: curves by name, and a limit with its words."""

    label: str
    curves: Mapping[str, Array]
    log: bool = False
    limit: tuple[float, str] | None = None


@styled
def rules_figure(profile: str, result: Result, *, options: RuleOptions) -> Figure:
    """Misfit, roughness and, where there are such, degrees of freedom, GCV and whiteness by iteration.

    The iteration is drawn as ``log(1 + k)``: rules pick early, and the run goes on for long.

    Parameters
    ----------
    profile : str
    result : Result
    options : RuleOptions
        As the rules took them: the target of the mean squared residual is ``(tau * noise)**2``, and GCV
        is drawn as ``chi_square / (1 - gcv_factor * degrees_of_freedom / n_data)**2``.

    References
    ----------
    Golub, Heath and Wahba (1979), Technometrics 21, 215-223.
    """
    history, chosen = result.history, result.chosen
    panels = _panels(history, options)
    placed = [choice for choice in result.choices if choice.pick.iteration is not None]

    # The key stands beside the last panel where that is alone, else below all in two columns.
    n_rows = -(-len(panels) // 2)
    alone = len(panels) % 2 == 1
    n_key = len(result.choices) if alone else -(-len(result.choices) // 2)
    key_height = KEY_STEP * (n_key + 1)
    step = HEIGHT + BELOW
    legend = 0.19 * (1 + len(history.whiteness) // 2) if history.whiteness else 0.0
    bottom = (
        FOOT + 0.5 + legend + (max(0.0, key_height - HEIGHT - 0.3 - legend) if alone else key_height + 0.15)
    )
    body = n_rows * step - BELOW
    figure = sheet(
        7.4,
        bottom + body + RAIL + HEADING,
        f"{profile}: where to stop",
        f"Chosen: {chosen.rule}, iteration {chosen.iteration:.3g}; {chosen.pick.reason}",
    )

    def corner(number: int) -> tuple[float, float]:
        row, column = divmod(number, 2)
        return 0.65 + column * (WIDTH + BESIDE), bottom + (n_rows - 1 - row) * step

    for i, one in enumerate(panels):
        axes = panel(figure, *corner(i), WIDTH, HEIGHT)
        _draw(axes, one, history.last)
        _mark(axes, one, placed, chosen)
        if i >= len(panels) - 2:
            axes.set_xlabel("iteration")
        if i < 2:
            _rail(axes, placed, chosen, history.last)
    if alone:
        left, low = corner(len(panels))
        _key(figure, result.choices, chosen, left - 0.35, low + HEIGHT)
    else:
        for column, first in enumerate(range(0, len(result.choices), n_key)):
            shown = result.choices[first : first + n_key]
            _key(figure, shown, chosen, corner(column)[0] - 0.35, bottom - 0.55)
    return figure


def _panels(history: History, options: RuleOptions) -> list[Curves]:
    target = (options.tau * options.noise) ** 2
    panels = [
        Curves("mean squared residual", {"": history.chi_square}, True, (target, f"target {target:.3g}")),
        # The first iterate has none, and a log scale no place for it.
        Curves("roughness", {"": np.where(history.solution_norm > 0, history.solution_norm, np.nan)}, True),
    ]
    gcv = history.gcv(options.gcv_factor)
    if history.degrees_of_freedom is not None and gcv is not None:
        panels += [
            Curves("degrees of freedom", {"": history.degrees_of_freedom}),
            Curves("GCV", {"": np.where(np.isfinite(gcv), gcv, np.nan)}, True),
        ]
    if history.whiteness:
        curves = {f"within each {name}": curve for name, curve in history.whiteness.items()}
        panels.append(Curves("distance from white", curves, True, (WHITE, f"white stays under {WHITE:g}")))
    return panels


def _draw(axes: Axes, one: Curves, last: int) -> None:
    for (name, curve), style in zip(one.curves.items(), cycle(("-", "--", ":", "-.")), strict=False):
        axes.plot(np.arange(last + 1), curve, color=LINE, lw=1.5, ls=style, label=name)
    end = np.log1p(max(last, 1))
    axes.set_xscale("function", functions=(np.log1p, np.expm1))
    axes.set(ylabel=one.label, xlim=np.expm1([-EDGE * end, (1 + EDGE) * end]))
    axes.set_xticks([tick for tick in TICKS if tick <= last])
    if one.log:
        axes.set_yscale("log")
        # Over many decades a locator with more than the powers of ten finds no ticks at all.
        low, high = axes.get_ylim()
        axes.yaxis.set_major_locator(LogLocator(subs=(1, 2, 5) if high < MOST_SUBDIVIDED * low else (1,)))
        axes.yaxis.set_major_formatter("{x:g}")
        axes.yaxis.set_minor_locator(NullLocator())
    if one.limit is not None:
        value, text = one.limit
        axes.axhline(value, color=MUTED, lw=1, ls=(0, (5, 3)), label=text)
        if not any(one.curves):
            axes.annotate(
                text,
                (1, value),
                (0, 2),
                xycoords=("axes fraction", "data"),
                textcoords="offset points",
                ha="right",
                va="bottom",
                size=7,
                color=MUTED,
            )
    if any(one.curves):
        # Below the panel: within, some curve always runs under it.
        axes.legend(
            loc="upper left", bbox_to_anchor=(0, -0.42 / HEIGHT), borderaxespad=0, borderpad=0, ncols=2,
            columnspacing=1.2,
        )  # fmt: skip


def _mark(axes: Axes, one: Curves, placed: list[Choice], chosen: Choice) -> None:
    highest = np.max(list(one.curves.values()), axis=0)
    axes.vlines(
        [choice.iteration for choice in placed],
        0,
        1,
        [badge_of(choice.rule).colour for choice in placed],
        lw=[1.3 if choice.rule == chosen.rule else 0.6 for choice in placed],
        alpha=[1.0 if choice.rule == chosen.rule else 0.45 for choice in placed],
        transform=axes.get_xaxis_transform(),
    )
    for choice in placed:
        badge, at = badge_of(choice.rule), choice.iteration
        front = choice.rule == chosen.rule
        axes.plot(
            at,
            np.interp(at, np.arange(highest.size), highest),
            badge.marker,
            ms=6.5 if front else 4.5,
            color=badge.colour,
            mec="black" if front else "white",
            mew=0.8 if front else 0.5,
            zorder=5 if front else 4,
        )


def _rail(axes: Axes, placed: list[Choice], chosen: Choice, last: int) -> None:
    """A badge above every pick, beside its neighbours where they are close, with a line down to it."""
    end = np.log1p(max(last, 1))
    picks = [(np.log1p(choice.iteration) / end + EDGE) / (1 + 2 * EDGE) for choice in placed]
    height = 1 + 0.28 / HEIGHT
    moved = spread(picks, BADGE / WIDTH, 0, 1)
    leads = LineCollection(
        [[(at, 1), (at, 1 + 0.05 / HEIGHT), (to, height)] for at, to in zip(picks, moved, strict=True)],
        colors=[badge_of(choice.rule).colour for choice in placed],
        linewidths=[1.3 if choice.rule == chosen.rule else 0.6 for choice in placed],
        transform=axes.transAxes,
        clip_on=False,
    )
    axes.add_collection(leads, autolim=False)
    for choice, to in zip(placed, moved, strict=True):
        front = choice.rule == chosen.rule
        draw_badge(axes, to, height, choice.rule, chosen=front, transform=axes.transAxes)


def _key(figure: Figure, choices: tuple[Choice, ...], chosen: Choice, left: float, top: float) -> None:
    """Which badge is which rule, what it picked, what that costs in misfit and picture, how sure it is."""
    axes = panel(figure, 0, 0, *figure.get_size_inches())
    axes.set(xlim=(0, figure.get_figwidth()), ylim=(0, figure.get_figheight()))
    axes.set_axis_off()

    def write(row: float, cells: tuple[str, str, str, str, str], weight: str, colour: str) -> None:
        for dx, text, side in zip(
            (0.17, 1.68, 2.14, 2.65, 2.76), cells, ("left", "right", "right", "right", "left"), strict=True
        ):
            axes.text(
                left + dx,
                top - KEY_STEP * row,
                text,
                size=7.5,
                ha=side,
                va="center_baseline",
                weight=weight,
                color=colour,
            )

    write(0.3, ("", "stop", "misfit", "distance", "standing"), "normal", MUTED)
    for row, choice in enumerate(choices, start=1):
        front = choice.rule == chosen.rule
        draw_badge(axes, left, top - KEY_STEP * (row + 0.3), choice.rule, chosen=front)
        at = choice.pick.iteration
        cells = (
            fitted(choice.rule, 7.5, "bold", 82, 1),
            "none" if at is None else f"{at:.3g}",
            f"{choice.chi_square:.2f}",
            "-" if choice.distance is None else f"{100 * choice.distance:.0f} %",
            "firm" if choice.pick.firm else "weak",
        )
        write(row + 0.3, cells, "bold" if front else "normal", INK)
