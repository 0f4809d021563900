"""The stopping rules as a figure: what each saw along the iteration, and where it would stop."""

from __future__ import annotations

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.ticker import LogLocator, MaxNLocator, NullLocator

from stillground.products.figures.badges import badge_of, draw_badge, shelves
from stillground.products.figures.sheet import FOOT, HEADING, LINE, MUTED, fitted, panel, sheet, styled
from stillground.protocols import Array, Choice, Result

WIDTH, HEIGHT = 2.95, 1.55
BADGE, KEY_STEP = 0.17, 0.21
"""Room for a badge, and for a line of the key, inches."""


@styled
def rules_figure(profile: str, result: Result, *, tau: float) -> Figure:
    """Misfit, roughness and, where probed, degrees of freedom and GCV against the iteration.

    Parameters
    ----------
    profile : str
    result : Result
    tau : float
        Of the discrepancy rule: its target for the mean squared residual is ``tau**2``.

    Notes
    -----
    GCV is drawn as ``chi_square / (1 - degrees_of_freedom / n_data)**2``.

    References
    ----------
    Golub, Heath and Wahba (1979), Technometrics 21, 215-223.
    """
    history, choices = result.history, result.choices
    curves = [("mean squared residual", history.chi_square), ("roughness", history.solution_norm)]
    if history.degrees_of_freedom is not None and history.gcv is not None:
        curves += [("degrees of freedom", history.degrees_of_freedom), ("GCV", history.gcv)]
    steps = np.arange(history.last + 1.0)
    placed = [choice for choice in choices if choice.pick.iteration is not None]
    per_inch = max(history.last, 1) * 1.06 / WIDTH
    rail = shelves([choice.iteration for choice in placed], BADGE * per_inch)

    n_key = -(-len(choices) // 2)
    key_height = KEY_STEP * n_key
    rail_height = BADGE * (max(rail, default=-1) + 1) + 0.1
    n_rows = len(curves) // 2
    bottom = FOOT + key_height + 0.55
    body = n_rows * HEIGHT + (n_rows - 1) * 0.45
    chosen = result.chosen
    figure = sheet(
        7.4,
        bottom + body + rail_height + HEADING,
        f"{profile}: where to stop",
        f"Chosen: {chosen.rule}, iteration {chosen.iteration:.3g}; {chosen.pick.reason}",
    )
    for i, (label, curve) in enumerate(curves):
        row, column = divmod(i, 2)
        axes = panel(
            figure,
            0.65 + column * (WIDTH + 0.7),
            bottom + (n_rows - 1 - row) * (HEIGHT + 0.45),
            WIDTH,
            HEIGHT,
        )
        axes.plot(steps, curve, color=LINE, lw=1.5)
        axes.set(ylabel=label, xlim=(-0.03 * history.last, 1.03 * max(history.last, 1)))
        if label in ("mean squared residual", "GCV"):
            axes.set_yscale("log")
            axes.yaxis.set_major_locator(LogLocator(subs=(1, 2, 5)))
            axes.yaxis.set_major_formatter("{x:g}")
            axes.yaxis.set_minor_locator(NullLocator())
        axes.xaxis.set_major_locator(MaxNLocator(integer=True, steps=[1, 2, 5, 10]))
        if row == n_rows - 1:
            axes.set_xlabel("iteration")
        _mark(axes, steps, curve, placed, chosen)
        if i == 0:
            axes.axhline(tau**2, color=MUTED, lw=1, ls=(0, (5, 3)))
            axes.annotate(
                f"target {tau**2:g}",
                (1, tau**2),
                (0, 2),
                xycoords=("axes fraction", "data"),
                textcoords="offset points",
                ha="right",
                va="bottom",
                size=7,
                color=MUTED,
            )
        if row == 0:
            for choice, shelf in zip(placed, rail, strict=True):
                draw_badge(
                    axes,
                    choice.iteration,
                    1 + (0.6 + shelf) * BADGE / HEIGHT,
                    choice.rule,
                    chosen=choice.rule == chosen.rule,
                    transform=axes.get_xaxis_transform(),
                )
    _key(figure, choices, chosen, FOOT + 0.05 + key_height)
    return figure


def _mark(axes: Axes, steps: Array, curve: Array, placed: list[Choice], chosen: Choice) -> None:
    for choice in placed:
        badge = badge_of(choice.rule)
        front = choice.rule == chosen.rule
        at = choice.iteration
        axes.axvline(at, color=badge.colour, lw=1.3 if front else 0.6, alpha=1 if front else 0.45)
        axes.plot(
            at,
            np.interp(at, steps, curve),
            badge.marker,
            ms=6.5 if front else 4.5,
            color=badge.colour,
            mec="black" if front else "white",
            mew=0.8 if front else 0.5,
            zorder=5 if front else 4,
        )


def _key(figure: Figure, choices: tuple[Choice, ...], chosen: Choice, top: float) -> None:
    """Which badge is which rule, what it picked and how sure it is, in two columns."""
    axes = panel(figure, 0, 0, *figure.get_size_inches())
    axes.set(xlim=(0, figure.get_figwidth()), ylim=(0, figure.get_figheight()))
    axes.set_axis_off()
    n_rows = -(-len(choices) // 2)
    for i, choice in enumerate(choices):
        column, row = divmod(i, n_rows)
        x, y = 0.5 + column * 3.5, top - KEY_STEP * (row + 0.5)
        draw_badge(axes, x, y, choice.rule, chosen=choice.rule == chosen.rule)
        at = choice.pick.iteration
        if at is None:
            picked = "found none"
        else:
            firm = "firm" if choice.pick.firm else "weak"
            picked = f"iteration {at:.3g}, residual {choice.chi_square:.3g}, {firm}"
        for dx, text in ((0.17, fitted(choice.rule, 7.5, "bold", 75, 1)), (1.2, picked)):
            axes.text(
                x + dx,
                y,
                text,
                size=7.5,
                va="center_baseline",
                weight="bold" if choice.rule == chosen.rule else "normal",
            )
