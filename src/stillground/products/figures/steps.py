"""The outer steps as a figure: how the linearisations led to the one that the rules judge."""

from __future__ import annotations

import numpy as np
from matplotlib.figure import Figure
from matplotlib.ticker import MaxNLocator

from stillground.products.figures.sheet import (
    FOOT,
    HEADING,
    INK,
    LINE,
    MUTED,
    RUST,
    TEAL,
    panel,
    sheet,
    styled,
)
from stillground.protocols import OuterSteps, Result


@styled
def steps_figure(profile: str, result: Result, steps: OuterSteps) -> Figure:
    """Misfit over all inner iterations, step by step, and over the last linearisation from the prior mean.

    Parameters
    ----------
    profile : str
    result : Result
        Of a nonlinear measurement.
    steps : OuterSteps
        That led to it.
    """
    bottom, height = FOOT + 0.5, 2.9
    chosen = result.chosen
    own = chosen.chi_square_recomputed
    figure = sheet(
        7.4,
        bottom + height + HEADING + 0.1,
        f"{profile}: outer steps and the last linearisation",
        f"{len(steps.targets)} steps take the misfit from {steps.misfits[0]:.3g} to {steps.misfits[-1]:.3g}; "
        f"the last linearisation begins at the prior mean and is judged by the rules"
        + ("" if own is None else f"; the misfit of its chosen answer, recomputed, is {own:.3g}"),
    )
    axes = panel(figure, 0.72, bottom, 6.5, height)
    axes.set(yscale="log", xlabel="inner iterations, one after another", ylabel="misfit (mean squared error)")
    axes.axhline(1, color=MUTED, lw=1, ls=(0, (5, 3)))
    begin = 0
    for number, (curve, target) in enumerate(zip(steps.inner, steps.targets, strict=True)):
        at = begin + np.arange(len(curve))
        axes.plot(at, curve, color=LINE, lw=1.2, label="" if number else "linearised")
        axes.plot(
            at[-1], target, "_", color=RUST, ms=11, mew=1.8, label="" if number else "target of the step"
        )
        begin = int(at[-1])
        axes.axvline(begin, color=MUTED, lw=0.5, alpha=0.5)
    ends = np.cumsum([0, *(len(curve) - 1 for curve in steps.inner)])
    axes.plot(ends, steps.misfits, "o", color=INK, ms=5, label="recomputed after each step", zorder=4)

    last = result.history.chi_square
    axes.plot(begin + np.arange(len(last)), last, color=TEAL, lw=1.8, label="last linearisation")
    where = begin + chosen.iteration
    axes.plot(
        where, chosen.chi_square, "o", mfc="none", mec=TEAL, ms=8, mew=1.6, label=f"{chosen.rule}: the answer"
    )
    if own is not None:
        axes.plot(where, own, "o", color=TEAL, ms=6, label="the answer, recomputed", zorder=5)
    axes.yaxis.set_major_formatter("{x:g}")
    axes.xaxis.set_major_locator(MaxNLocator(integer=True))
    axes.margins(x=0.02)
    axes.legend(loc="upper right", frameon=True, facecolor=axes.get_facecolor(), edgecolor="none", ncols=2)
    return figure
