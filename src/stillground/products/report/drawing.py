"""SVG charts in our look: axes with the plotting library's ticks, and what is drawn on them."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field

import numpy as np
from markupsafe import Markup
from matplotlib.ticker import MaxNLocator
from numpy.typing import ArrayLike

from stillground.products.figures.badges import badge_of
from stillground.protocols import Array

_SCALES: dict[str, Callable[[Array], Array]] = {"linear": np.asarray, "log": np.log, "log1p": np.log1p}
_ITERATIONS = (0, 1, 2, 5, 10, 20, 50, 100, 200, 500, 1000, 2000, 5000, 10_000)
# Corners and turn of the badges' shapes; a circle has none.
_CORNERS = {
    "s": (4, 45.0),
    "p": (5, 0.0),
    "D": (4, 0.0),
    "^": (3, 0.0),
    "h": (6, 0.0),
    "v": (3, 180.0),
    "8": (8, 22.5),
}
_RADIUS = {"s": 9.6, "D": 9.4, "^": 10.5, "v": 10.5}


def tag(name: str, text: object = "", **attributes: object) -> Markup:
    """An element with everything escaped; in names of attributes ``_`` is a hyphen, at the end nothing.

    Examples
    --------
    >>> tag("text", "a < b", x=1.0, text_anchor="end")
    Markup('<text x="1" text-anchor="end">a &lt; b</text>')
    """
    said = Markup("").join(
        Markup(' {}="{}"').format(key.rstrip("_").replace("_", "-"), _number(value))
        for key, value in attributes.items()
        if value is not None
    )
    return Markup("<{0}{1}>{2}</{0}>").format(Markup(name), said, text)


def _number(value: object) -> object:
    return f"{float(value):.2f}".rstrip("0").rstrip(".") if isinstance(value, float | np.floating) else value


def joined(parts: Sequence[Markup]) -> Markup:
    return Markup("").join(parts)


def minus(text: str) -> str:
    """A number with a minus sign instead of a hyphen."""
    return text.replace("-", "−")


@dataclass
class Chart:
    """A chart being drawn; coordinates of the data, sizes in pixels at full width.

    Parameters
    ----------
    size : (width, height)
    x, y : (low, high)
        Of the axes; low above high turns an axis.
    scales : of x and y
        "linear", "log", or "log1p" for iterations.
    margins : (left, right, top, bottom)
    """

    size: tuple[float, float]
    x: tuple[float, float]
    y: tuple[float, float]
    scales: tuple[str, str] = ("linear", "linear")
    margins: tuple[float, float, float, float] = (46, 10, 8, 32)
    parts: list[Markup] = field(default_factory=list)

    @property
    def left(self) -> float:
        return self.margins[0]

    @property
    def right(self) -> float:
        return self.size[0] - self.margins[1]

    @property
    def top(self) -> float:
        return self.margins[2]

    @property
    def bottom(self) -> float:
        return self.size[1] - self.margins[3]

    def across(self, values: ArrayLike) -> Array:
        return self.left + _share(values, self.x, self.scales[0]) * (self.right - self.left)

    def up(self, values: ArrayLike) -> Array:
        return self.bottom - _share(values, self.y, self.scales[1]) * (self.bottom - self.top)

    def frame(
        self, x_label: str, y_label: str, *, grid: bool = True, ticks: tuple[int, int] = (6, 4)
    ) -> None:
        """Ticks, numbers, labels and the two lines of the axes."""
        lines = "grid" if grid else "none"
        if x_label:
            for value, text in _ticks(self.x, self.scales[0], ticks[0]):
                at = float(self.across(value))
                self.add("path", class_=lines, d=f"M{at:.1f} {self.top:.1f}V{self.bottom:.1f}")
                self.add("path", class_="axis", d=f"M{at:.1f} {self.bottom:.1f}v4")
                self.add("text", text, x=at, y=self.bottom + 15, text_anchor="middle")
        for value, text in _ticks(self.y, self.scales[1], ticks[1]):
            at = float(self.up(value))
            self.add("path", class_=lines, d=f"M{self.left:.1f} {at:.1f}H{self.right:.1f}")
            self.add("text", text, x=self.left - 6, y=at + 4, text_anchor="end")
        self.add(
            "path", class_="axis", d=f"M{self.left:.1f} {self.top:.1f}V{self.bottom:.1f}H{self.right:.1f}"
        )
        middle, height = (self.left + self.right) / 2, (self.top + self.bottom) / 2
        self.add("text", x_label, class_="label", x=middle, y=self.size[1] - 3, text_anchor="middle")
        turn = f"translate(11 {height:.1f}) rotate(-90)"
        self.add("text", y_label, class_="label", transform=turn, text_anchor="middle")

    def y_ticks(self, wanted: int) -> list[tuple[float, str]]:
        """Round values on the upright axis and their texts."""
        return _ticks(self.y, self.scales[1], wanted)

    def bar_ticks(self, label: str) -> None:
        """Numbers and a label under a lying colour bar."""
        for value, text in _ticks(self.x, self.scales[0], 5):
            at = float(self.across(value))
            self.add("text", text, x=at, y=self.bottom + 12, text_anchor="middle")
        middle = (self.left + self.right) / 2
        self.add("text", label, class_="label", x=middle, y=self.size[1] - 4, text_anchor="middle")

    def line(self, x: ArrayLike, y: ArrayLike, class_: str = "curve") -> None:
        """A line through the points that are finite."""
        points = np.column_stack([self.across(x), self.up(y)])
        points = points[np.isfinite(points).all(axis=1)]
        if points.size:
            self.add("path", class_=class_, d="M" + "L".join(f"{px:.1f} {py:.1f}" for px, py in points))

    def dots(self, x: ArrayLike, y: ArrayLike, class_: str, radius: float) -> None:
        """Round dots as the ends of strokes of no length, so that a thousand of them cost little."""
        points = np.column_stack([np.atleast_1d(self.across(x)), np.atleast_1d(self.up(y))])
        path = "".join(f"M{px:.1f} {py:.1f}h0" for px, py in points)
        self.add("path", class_=f"dots {class_}", d=path, stroke_width=2 * radius)

    def add(self, name: str, text: object = "", **attributes: object) -> None:
        self.parts.append(tag(name, text, **attributes))

    def svg(self, said: str, **attributes: object) -> Markup:
        """The chart, named for those who do not see it."""
        box = f"0 0 {self.size[0]:g} {self.size[1]:g}"
        return tag("svg", joined(self.parts), viewBox=box, role="img", aria_label=said, **attributes)


def limits(values: ArrayLike, scale: str = "linear", pad: float = 0.06) -> tuple[float, float]:
    """Ends of an axis that holds the values with some room; safe where they are few, equal or none.

    Examples
    --------
    >>> limits([1.0, 1.0])
    (0.5, 1.5)
    >>> limits([float("nan")], "log")
    (0.1, 1.0)
    """
    found = np.asarray(values, dtype=float).ravel()
    found = found[np.isfinite(found) & ((found > 0) | (scale != "log"))]
    if not found.size:
        return (0.1, 1.0) if scale == "log" else (0.0, 1.0)
    low, high = float(found.min()), float(found.max())
    if scale == "log":
        room = (high / low) ** pad if high > low else 1.5
        return low / room, high * room
    room = pad * (high - low) if high > low else 0.5 * (abs(high) or 1.0)
    return low - room, high + room


def badge_symbol(rule: str, name: str) -> Markup:
    """A rule's badge as an SVG symbol of 22 by 22 pixels with the id ``name``."""
    badge = badge_of(rule)
    radius = _RADIUS.get(badge.marker, 9.0)
    shape = Markup('<circle cx="11" cy="11" r="8.6"/>')
    if badge.marker in _CORNERS:
        n, turn = _CORNERS[badge.marker]
        angle = np.deg2rad(turn + 360 * np.arange(n) / n)
        middle = {"^": 12.2, "v": 9.8}.get(badge.marker, 11.0)
        points = " ".join(f"{11 + radius * np.sin(a):.2f},{middle - radius * np.cos(a):.2f}" for a in angle)
        shape = tag("polygon", points=points)
    lift = {"^": 1.9, "v": -1.4}.get(badge.marker, 0.0)
    letter = tag("text", badge.letter, class_="letter", x=11, y=14.6 + lift, text_anchor="middle")
    return tag("symbol", shape + letter, id=name, viewBox="0 0 22 22", fill=badge.colour, overflow="visible")


def _share(values: ArrayLike, ends: tuple[float, float], scale: str) -> Array:
    with np.errstate(divide="ignore", invalid="ignore"):
        turned = _SCALES[scale](np.asarray(values, dtype=float))
        low, high = _SCALES[scale](np.asarray(ends, dtype=float))
    return np.asarray((turned - low) / (high - low))


def _ticks(ends: tuple[float, float], scale: str, wanted: int) -> list[tuple[float, str]]:
    low, high = min(ends), max(ends)
    evenly = MaxNLocator(wanted, steps=[1, 2, 5, 10])
    candidates: list[float] = list(evenly.tick_values(low, high))
    if scale == "log1p":
        candidates = [float(tick) for tick in _ITERATIONS]
    elif scale == "log":
        decades = range(math.floor(math.log10(low)), math.ceil(math.log10(high)) + 1)
        size = math.log10(high / low)
        steps = (1, 2, 5) if size < 0.5 * wanted else (1,)
        round_ = [m * 10.0**e for e in decades[:: max(1, math.ceil(size / (1.5 * wanted)))] for m in steps]
        if sum(low <= tick <= high for tick in round_) > 1:
            candidates = round_
    slack = 1e-9 * (high - low)
    kept = [float(value) for value in candidates if low - slack <= value <= high + slack]
    return [(value, minus(f"{value:.6g}")) for value in kept]
