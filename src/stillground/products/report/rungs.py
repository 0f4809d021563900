"""The ladder on the page: change against spacing with the orders, and the picture on every rung."""

from __future__ import annotations

import numpy as np
from markupsafe import Markup

from stillground.percent import percent
from stillground.products.report.drawing import Chart, limits
from stillground.products.report.folder import Profile
from stillground.products.report.ground import Ground
from stillground.products.report.picture import Sight, small

SIZE = (380.0, 250.0)
_ROOM = (250.0, 210.0)


def change_chart(profile: Profile) -> Markup | None:
    """Relative change by the spacing of the finer rung; None with a single rung."""
    refinement = profile.entry.refinement
    spacing = np.array([level.spacing for level in refinement.levels])
    change = np.array(refinement.change, dtype=float)
    if change.size == 0 or not (change > 0).any() or change.size != spacing.size - 1:
        return None
    finer, drawn = spacing[1:], change > 0
    tolerance = float(profile.ladder["tolerance"])
    y = limits(np.append(change[drawn], tolerance), "log", 0.25)
    chart = Chart(SIZE, (finer.min() / 1.35, finer.max() * 1.35), y, ("log", "log"), (58, 14, 10, 40))
    chart.frame("spacing of the finer rung (m)", "relative change")
    height = float(chart.up(tolerance))
    chart.add("path", class_="limit", d=f"M{chart.left:.1f} {height:.1f}H{chart.right:.1f}")
    chart.add("text", f"tolerance {tolerance:g}", x=chart.right - 4, y=height - 5, text_anchor="end")
    ends = np.array(chart.x)
    said = "; ".join(f"{h:g} m: {percent(c)}" for h, c in zip(finer, change, strict=True))
    if refinement.order is not None and drawn[-1]:
        chart.line(*_within(chart, ends, change[-1] * (ends / finer[-1]) ** refinement.order), "fitted")
        said += f"; order {refinement.order:.2f}"
    if refinement.expected and drawn[-1]:
        chart.line(*_within(chart, ends, change[-1] * (ends / finer[-1]) ** refinement.expected), "expected")
        said += f", expected {refinement.expected:g}"
    chart.dots(finer[drawn], change[drawn], "dot", 5)
    return chart.svg(f"Change between rungs against spacing: {said}", width=SIZE[0])


def rung_pictures(profile: Profile, ground: Ground) -> list[tuple[Markup, str]]:
    """Pictures of the rungs, coarse to fine, with the mask of the finest, and what to write below each."""
    pictures = []
    for i, level in enumerate(profile.entry.refinement.levels):
        name = f"{profile.seen}_rung_{i}"
        if name not in profile.ladder:
            continue
        stored = profile.ladder[name].values
        values = ground.shown(stored)
        said = f"{ground.long_name} at a spacing of {level.spacing:g} m"
        sight = Sight(values, ground.scale, ground.label, said)
        own = "no stop of its own" if level.iteration is None else f"own stop {level.iteration:.3g}"
        caption = f"{level.spacing:g} m · {level.nodes:,} nodes · {own}"
        pictures.append((small(ground, sight, _ROOM), caption))
    return pictures


def _within(chart: Chart, x: np.ndarray, y: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """A line of the power law cut to the upright axis."""
    low, high = np.log(chart.y[0]), np.log(chart.y[1])
    along, up = np.log(x), np.log(y)
    t = np.linspace(0, 1, 200)
    line = along[0] + t * (along[1] - along[0]), up[0] + t * (up[1] - up[0])
    kept = (line[1] >= low) & (line[1] <= high)
    return np.exp(line[0][kept]), np.exp(line[1][kept])
