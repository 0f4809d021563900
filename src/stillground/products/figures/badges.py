"""One badge for each stopping rule: a letter in a shape, so that no rule hangs on its colour."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from matplotlib.axes import Axes
from matplotlib.transforms import Transform
from scipy.optimize import isotonic_regression


@dataclass(frozen=True)
class Badge:
    """Letter, marker shape (the plotting library's code) and colour."""

    letter: str
    marker: str
    colour: str


BADGES = {
    "discrepancy": Badge("D", "o", "#0b62a4"),
    "gcv": Badge("G", "s", "#b3480b"),
    "risk": Badge("R", "p", "#a3213f"),
    "whiteness": Badge("W", "D", "#8a2f7c"),
    "l-curve": Badge("L", "^", "#0a7a58"),
    "quasi-optimality": Badge("Q", "h", "#6b5a00"),
    "monotone-error": Badge("M", "v", "#44546a"),
    "hanke-raus": Badge("H", "8", "#5b3fa0"),
}

# Marker size in points where a shape needs another one, and how far its letter sits above the middle.
SHAPES = {"D": (8.5, 0.0), "s": (9.5, 0.0), "^": (12.5, -1.4), "v": (12.5, 1.4)}


def badge_of(rule: str) -> Badge:
    """The rule's badge; a rule from elsewhere gets its first letter in a circle of ink."""
    return BADGES.get(rule) or Badge(rule[:1].upper() or "?", "o", "#18232e")


def draw_badge(
    axes: Axes, x: float, y: float, rule: str, *, chosen: bool, transform: Transform | None = None
) -> None:
    """Draw a badge at a point; the chosen rule's has an outline of ink."""
    badge = badge_of(rule)
    where = transform or axes.transData
    size, lift = SHAPES.get(badge.marker, (10.5, 0.0))
    axes.plot(
        x,
        y,
        badge.marker,
        ms=size,
        color=badge.colour,
        mec="black" if chosen else "white",
        mew=1.3 if chosen else 0.6,
        transform=where,
        clip_on=False,
        zorder=5,
    )
    axes.annotate(
        badge.letter,
        (x, y),
        (0, lift),
        xycoords=where,
        textcoords="offset points",
        color="white",
        size=6,
        weight="bold",
        ha="center",
        va="center_baseline",
        annotation_clip=False,
        zorder=6,
    )


def spread(positions: Sequence[float], gap: float, low: float, high: float) -> list[float]:
    """Positions for badges: moved as little as can be (least squares) to stand ``gap`` apart in a room.

    Where they do not all fit between ``low`` and ``high`` the gap shrinks.

    Examples
    --------
    >>> spread([5.0, 1.0, 1.0], 1.0, 0.0, 9.0)
    [5.0, 0.5, 1.5]
    """
    if not positions:
        return []
    order = np.argsort(positions, kind="stable")
    steps = np.arange(order.size) * min(gap, (high - low) / max(order.size - 1, 1))
    level = isotonic_regression(np.asarray(positions)[order] - steps).x
    moved = np.empty(order.size)
    moved[order] = np.clip(level, low, high - steps[-1]) + steps
    return moved.tolist()
