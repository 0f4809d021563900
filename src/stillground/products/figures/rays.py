"""The ways of bent rays on a picture of the ground."""

from __future__ import annotations

from collections.abc import Sequence

from matplotlib.axes import Axes
from matplotlib.collections import LineCollection
from matplotlib.lines import Line2D

from stillground.products.figures.sheet import PAPER
from stillground.products.rays import drawn_rays
from stillground.protocols import Array


def draw_rays(axes: Axes, rays: Sequence[Array]) -> Line2D:
    """Draw rays, (distance, elevation) in m, faintly under the positions; gives their sign for a legend.

    Those of `drawn_rays`.
    """
    drawn = drawn_rays(rays)
    faint = {"lw": 0.4, "alpha": max(0.15, 0.5 * min(1.0, (60 / max(len(drawn), 1)) ** 0.5)), "color": PAPER}
    axes.add_collection(LineCollection(drawn, **faint, zorder=2.5), autolim=False)
    return Line2D([], [], color="#9aa4aa", lw=0.8, label="ray")
