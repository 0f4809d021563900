"""The ways of bent rays on a picture of the ground."""

from __future__ import annotations

import math
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
    lines = LineCollection(drawn, lw=0.4, alpha=opacity(len(drawn)), color=PAPER, zorder=2.5)
    axes.add_collection(lines, autolim=False)
    return Line2D([], [], color="#9aa4aa", lw=0.8, label="ray")


def opacity(n_rays: int) -> float:
    """Of each of so many rays on a picture: the more, the fainter.

    Examples
    --------
    >>> opacity(10), opacity(240), opacity(10_000)
    (0.5, 0.25, 0.15)
    """
    return max(0.15, 0.5 * min(1.0, math.sqrt(60 / max(n_rays, 1))))
