"""Pictures of the ground that need no script: for print, and where the live section cannot run."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from markupsafe import Markup
from matplotlib.colors import to_rgb
from numpy.typing import NDArray

from stillground.products.figures.field import FADE, resampled
from stillground.products.figures.positions import is_star
from stillground.products.figures.rays import opacity
from stillground.products.figures.sheet import PAPER
from stillground.products.reliability import MESH_DEPENDENT, POORLY_COVERED, RELIABLE
from stillground.products.report.drawing import Chart, limits
from stillground.products.report.encoding import png
from stillground.products.report.ground import FIELD, Frame, Ground, colours
from stillground.protocols import Array

HATCH = "#7c858c"
_STAR = "m0 -5l1.5 3.4h3.7l-2.9 2.4 1 3.7-3.3-2.2-3.3 2.2 1-3.7-2.9-2.4h3.7z"
_TRIANGLE = "m0 2.5l-3.2 -5.5h6.400z"
_LEVELS = 100
_BAR = 64
_LARGEST = (820.0, 430.0)
_COLUMN = (430.0, 430.0)


@dataclass(frozen=True)
class Sight:
    """What a picture shows and how.

    Parameters
    ----------
    values : array, shape (nz, nx), of any grid of the same extent
    scale : (low, high)
    label : str
        Of the colour bar, with units.
    said : str
        The picture in words.
    colours : str
        Name of the colour table.
    """

    values: Array
    scale: tuple[float, float]
    label: str
    said: str
    colours: str = FIELD


def large(
    ground: Ground,
    sight: Sight,
    places: Mapping[str, Array],
    band: Array | None = None,
    rays: Sequence[Array] = (),
) -> Markup:
    """A picture with axes, colour bar, surface, rays and positions; a column with its error band."""
    frame = ground.frame
    if frame.distance is None:
        return _column(ground, sight, _COLUMN, band, places)
    width, height = _fitted(frame, _LARGEST)
    chart = _chart(frame, (width + 130, height + 62), (52, 78, 20, 42))
    _image(chart, ground, sight, pixels=900)
    _rays(chart, rays)
    exaggerated = f", heights × {frame.exaggeration}" if frame.exaggeration > 1 else ""
    chart.frame(f"distance (m){exaggerated}", "elevation (m)", grid=False, ticks=(8, 7))
    draw_places(chart, places)
    _bar(chart, sight)
    return chart.svg(sight.said, width=chart.size[0])


def small(ground: Ground, sight: Sight, room: tuple[float, float]) -> Markup:
    """A picture without axes that fits into ``room``, (width, height) in pixels."""
    frame = ground.frame
    if frame.distance is None:
        return _column(ground, sight, room, None, {})
    width, height = _fitted(frame, room)
    chart = _chart(frame, (width + 2, height + 2), (1, 1, 1, 1))
    _image(chart, ground, sight, pixels=300)
    return chart.svg(sight.said, width=chart.size[0])


def colour_bar(sight: Sight, width: float = 300) -> Markup:
    """A lying colour bar for a row of small pictures."""
    table = colours(sight.colours)
    chart = Chart((width, 46), sight.scale, (0, 1), margins=(12, 12, 2, 32))
    step = (chart.right - chart.left) / _BAR
    for i in range(_BAR):
        shade = table[round(255 * (i + 0.5) / _BAR)]
        chart.add("rect", x=chart.left + i * step, y=2, width=step + 0.5, height=10, fill=_hex(shade))
    chart.bar_ticks(sight.label)
    return chart.svg(f"colour bar: {sight.label}", width=width)


def draw_places(chart: Chart, places: Mapping[str, Array]) -> None:
    """Signs where the groups of the data stand, as in the figures; of a column on the left edge."""
    for name, where in sorted(places.items(), key=lambda item: is_star(item[0])):
        sign = _STAR if is_star(name) else _TRIANGLE
        across = chart.across(where[:, 0]) if where.shape[1] > 1 else np.full(len(where), chart.left)
        path = "".join(f"M{x:.1f} {y:.1f}{sign}" for x, y in zip(across, chart.up(where[:, -1]), strict=True))
        chart.add("path", class_="place-star" if is_star(name) else "place-triangle", d=path)


def _rays(chart: Chart, rays: Sequence[Array]) -> None:
    """Rays, (distance, elevation) in m, as one path; ``data-box`` tells the script its frame."""
    lines = []
    for ray in rays:
        corners = np.column_stack([chart.across(ray[:, 0]), chart.up(ray[:, 1])]).round(1)
        # Steps are shorter than places.
        steps = " ".join(f"{x:.3g} {y:.3g}" for x, y in np.diff(corners, axis=0))
        lines.append(f"M{corners[0, 0]:g} {corners[0, 1]:g}l{steps}")
    if lines:
        box = f"{chart.left:g} {chart.top:g} {chart.right - chart.left:.2f} {chart.bottom - chart.top:.2f}"
        faint = round(opacity(len(lines)), 3)
        chart.add("path", class_="rays", d="".join(lines), data_box=box, stroke_opacity=faint)


def column_ends(values: Array, band: Array | None, scale: tuple[float, float]) -> tuple[float, float]:
    """Ends of a column's level axis: they hold the values with their error band, and the scale."""
    drawn = values if band is None else np.concatenate([values - band, values + band])
    return limits(np.append(drawn, scale))


def _fitted(frame: Frame, room: tuple[float, float]) -> tuple[float, float]:
    assert frame.distance is not None
    across = float(np.ptp(frame.distance))
    up = float(np.ptp(frame.elevation)) * frame.exaggeration
    scale = min(room[0] / across, room[1] / up)
    return across * scale, up * scale


def _chart(frame: Frame, size: tuple[float, float], margins: tuple[float, float, float, float]) -> Chart:
    assert frame.distance is not None
    x = (float(frame.distance[0]), float(frame.distance[-1]))
    return Chart(size, x, (float(frame.elevation[-1]), float(frame.elevation[0])), margins=margins)


def _image(chart: Chart, ground: Ground, sight: Sight, pixels: int) -> None:
    frame = ground.frame
    width, height = chart.right - chart.left, chart.bottom - chart.top
    density = pixels / max(width, height)
    shape = (max(2, round(height * density)), max(2, round(width * density)))
    chart.add(
        "image",
        href=_png(ground, sight, shape),
        x=chart.left,
        y=chart.top,
        width=width,
        height=height,
        preserveAspectRatio="none",
    )
    if frame.surface is not None:
        chart.line(frame.distance if frame.distance is not None else (), frame.surface, "surface")


def _png(ground: Ground, sight: Sight, shape: tuple[int, int]) -> str:
    """The function at the pixels, opaque: unreliable ground blended with paper and hatched, as data: URI."""
    frame = ground.frame
    low, high = sight.scale
    level = np.clip((resampled(sight.values, shape) - low) / (high - low), 0, 1)
    code = np.rint(level * (_LEVELS - 1)).astype(np.uint8)
    rows, columns = np.indices(shape, sparse=True)
    for flag, hatched in (
        (POORLY_COVERED, (rows + columns) % 9 == 0),
        (MESH_DEPENDENT, (rows % 7 == 0) & (columns % 7 == 0)),
    ):
        here = resampled((ground.flags == flag).astype(float), shape) >= 0.5
        code[here] += _LEVELS
        code[here & hatched] = 2 * _LEVELS
    if frame.surface is not None:
        surface = resampled(np.vstack([frame.surface, frame.surface]), (2, shape[1]))[0]
        ends = frame.elevation[0], frame.elevation[-1]
        height = ends[0] - (np.arange(shape[0]) + 0.5) / shape[0] * (ends[0] - ends[1])
        code[height[:, None] > surface] = 2 * _LEVELS + 1
    table = colours(sight.colours)[np.rint(np.linspace(0, 255, _LEVELS)).astype(int)].astype(float)
    paper = 255 * np.array(to_rgb(PAPER))
    veiled = (1 - FADE) * table + FADE * paper
    extra = 255 * np.array([to_rgb(HATCH), to_rgb("#fffefb")])
    return png(code, np.rint(np.vstack([table, veiled, extra])))


def _bar(chart: Chart, sight: Sight) -> None:
    table = colours(sight.colours)
    left, step = chart.right + 14, (chart.bottom - chart.top) / _BAR
    for i in range(_BAR):
        y = chart.bottom - (i + 1) * step
        shade = table[round(255 * (i + 0.5) / _BAR)]
        chart.add("rect", x=left, y=y, width=12, height=step + 0.5, fill=_hex(shade))
    scale = Chart(chart.size, (0, 1), sight.scale, margins=(0, 0, chart.margins[2], chart.margins[3]))
    for value, text in scale.y_ticks(6):
        chart.add("text", text, x=left + 17, y=float(scale.up(value)) + 4)
    chart.add("text", sight.label, class_="label", x=chart.size[0] - 2, y=12, text_anchor="end")


def _column(
    ground: Ground,
    sight: Sight,
    size: tuple[float, float],
    band: Array | None,
    places: Mapping[str, Array],
) -> Markup:
    """Value against elevation; hatched where it is not reliable."""
    elevation, values = ground.frame.elevation, sight.values[:, 0]
    at = np.linspace(elevation[0], elevation[-1], values.size)
    if ground.frame.surface is not None:
        below = at <= ground.frame.surface[0] + 1e-9
        at, values, band = at[below], values[below], None if band is None else band[below]
    ends = column_ends(values, None if band is None else band[:, 0], sight.scale)
    chart = Chart(size, ends, (float(elevation[-1]), float(elevation[0])), margins=(52, 14, 8, 38))
    chart.frame(sight.label, "elevation (m)", ticks=(5, 7))
    half = abs(float(elevation[0] - elevation[-1])) / max(elevation.size - 1, 1) / 2
    for flag, height in zip(ground.flags[:, 0], elevation, strict=True):
        if flag != RELIABLE and (ground.frame.surface is None or height <= ground.frame.surface[0]):
            top = max(float(chart.up(height + half)), chart.top)
            bottom = min(float(chart.up(height - half)), chart.bottom)
            chart.add("rect", class_="veil", x=chart.left, y=top, width=chart.right - chart.left,
                      height=bottom - top)  # fmt: skip
    if band is not None:
        x = np.concatenate([values - band[:, 0], (values + band[:, 0])[::-1]])
        chart.line(x, np.concatenate([at, at[::-1]]), "band")
    chart.line(values, at)
    if ground.usual is not None and sight.label == ground.label:
        ways = zip(ground.usual.values, ground.usual.lower, ground.usual.upper, strict=True)
        for value, lower, upper in ways:
            if ends[0] <= value <= ends[1]:
                chart.line([value, value], [lower, upper], "usual")
    draw_places(chart, places)
    return chart.svg(sight.said, width=size[0])


def _hex(shade: NDArray[np.uint8]) -> str:
    return "#" + bytes(shade).hex()
