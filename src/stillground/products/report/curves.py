"""What the rules saw along the iteration, as charts that follow the slider, and as a table."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from markupsafe import Markup

from stillground.products.figures.badges import badge_of, spread
from stillground.products.figures.rules import WHITE
from stillground.products.report.drawing import Chart, limits
from stillground.products.report.folder import Profile
from stillground.protocols import Array

SIZE = (430.0, 168.0)
_RAIL, _BADGE = 24.0, 16.0
_ROWS = 40
_LEAST, _MOST = 1e-2, 1e2


@dataclass(frozen=True)
class CurveTable:
    """The curves in numbers, for those who do not see them: thinned, the last iteration kept."""

    head: tuple[str, ...]
    rows: tuple[tuple[str, ...], ...]


def curve_charts(profile: Profile, symbols: dict[str, str]) -> list[Markup]:
    """Misfit against roughness, GCV and whiteness, where the history has them; ``symbols`` by rule."""
    history = profile.history
    iteration = history["iteration"].values.astype(float)
    misfit, roughness = (history[name].values.astype(float) for name in ("chi_square", "solution_norm"))
    target = float(history["target_chi_square"]) if "target_chi_square" in history else np.nan
    # Where the fit comes down to rounding, or all freedom is used up, nothing is to be seen any more.
    misfit = np.where((roughness > 0) & (misfit > _LEAST * profile.entry.chosen.chi_square), misfit, np.nan)
    chart = _chart(limits(np.append(misfit, target), "log"), limits(roughness, "log"), ("log", "log"))
    chart.frame("misfit (mean squared residual)", "roughness")
    _limit(chart, target, upright=True)
    charts = [_finish(chart, profile, symbols, misfit, roughness, "Roughness against misfit")]
    along = (0.0, float(max(iteration[-1], 1)))
    if "gcv" in history:
        gcv = history["gcv"].values.astype(float)
        gcv = np.where(gcv < _MOST * np.nanmin(gcv), gcv, np.nan) if np.isfinite(gcv).any() else gcv
        chart = _chart(along, limits(gcv, "log"), ("log1p", "log"))
        chart.frame("iteration", "GCV")
        least = int(np.nanargmin(gcv)) if np.isfinite(gcv).any() else 0
        said = f"Generalised cross-validation, least at iteration {least}"
        charts.append(_finish(chart, profile, symbols, iteration, gcv, said))
    whiteness = {
        str(name).removeprefix("whiteness_"): history[name].values.astype(float)
        for name in history.data_vars
        if str(name).startswith("whiteness_")
    }
    if whiteness:
        highest = np.max(list(whiteness.values()), axis=0)
        chart = _chart(along, (0.0, limits(np.append(highest, WHITE))[1]), ("log1p", "linear"))
        height = float(chart.up(WHITE))
        chart.add("rect", class_="band", x=chart.left, y=height, width=chart.right - chart.left,
                  height=chart.bottom - height)  # fmt: skip
        chart.frame("iteration", "distance from white")
        for curve in whiteness.values():
            chart.line(iteration, curve, "curve faint")
        names = " and ".join(f"each {name}" for name in whiteness)
        said = f"Distance of the residuals from white noise within {names}; shaded: passes as white (95 %)"
        charts.append(_finish(chart, profile, symbols, iteration, highest, said))
    return charts


def curve_table(profile: Profile) -> CurveTable:
    """Iteration, misfit, roughness, degrees of freedom, GCV and whiteness, where there are such."""
    history = profile.history
    names = {"iteration": "iteration", "chi_square": "misfit", "solution_norm": "roughness",
             "degrees_of_freedom": "degrees of freedom", "gcv": "GCV"}  # fmt: skip
    names |= {
        str(name): f"distance from white, {str(name).removeprefix('whiteness_')}"
        for name in history.data_vars
        if str(name).startswith("whiteness_")
    }
    found = {name: said for name, said in names.items() if name in history.variables}
    last = history.sizes["iteration"] - 1
    rows = sorted({*range(0, last + 1, max(1, -(-(last + 1) // _ROWS))), last})
    return CurveTable(
        tuple(found.values()),
        tuple(tuple(f"{float(history[name].values[row]):.4g}" for name in found) for row in rows),
    )


def _chart(x: tuple[float, float], y: tuple[float, float], scales: tuple[str, str]) -> Chart:
    return Chart(SIZE, x, y, scales, margins=(46, 10, _RAIL + 6, 32))


def _limit(chart: Chart, value: float, *, upright: bool) -> None:
    if np.isfinite(value) and upright:
        x = float(chart.across(value))
        chart.add("path", class_="limit", d=f"M{x:.1f} {chart.top:.1f}V{chart.bottom:.1f}")
        chart.add("text", f"target {value:.3g}", x=x + 4, y=chart.bottom - 5)


def _finish(chart: Chart, profile: Profile, symbols: dict[str, str], x: Array, y: Array, said: str) -> Markup:
    """The curve, a badge above every pick with a line down to it, and the mark that follows the slider."""
    chart.line(x, y)
    px, py = chart.across(x), chart.up(y)
    known = np.isfinite(px) & np.isfinite(py)
    number = np.arange(x.size)
    placed = [rule for rule in profile.entry.rules if rule.iteration is not None and rule.rule in symbols]
    at = [float(np.interp(rule.iteration or 0.0, number[known], px[known])) for rule in placed]
    heights = [float(np.interp(rule.iteration or 0.0, number[known], py[known])) for rule in placed]
    middles = spread(at, _BADGE + 1, chart.left + _BADGE / 2, chart.right - _BADGE / 2)
    for rule, one, height, middle in zip(placed, at, heights, middles, strict=True):
        colour = badge_of(rule.rule).colour
        path = f"M{middle:.1f} {_BADGE:.1f}L{one:.1f} {chart.top:.1f}V{height:.1f}"
        chart.add("path", class_="lead", d=path, stroke=colour)
        chart.add("circle", cx=one, cy=height, r=3, fill=colour)
    for rule, middle in zip(placed, middles, strict=True):
        chart.add(
            "use",
            href=f"#{symbols[rule.rule]}",
            class_="badge",
            data_rule=symbols[rule.rule],
            x=middle - _BADGE / 2,
            y=1.0,
            width=_BADGE,
            height=_BADGE,
        )
    chart.add("circle", class_="now", r=5, cx=-99, cy=-99)
    points = " ".join(f"{a:.1f},{b:.1f}" if ok else "-" for a, b, ok in zip(px, py, known, strict=True))
    return chart.svg(said, class_="curve-chart", data_points=points)
