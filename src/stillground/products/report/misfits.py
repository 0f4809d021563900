"""The data fit on the page: residuals by the first groupings, their spread, the worst group, the curves."""

from __future__ import annotations

import re
from dataclasses import dataclass

import numpy as np
import pandas as pd
from markupsafe import Markup

from stillground.products.data_curves import data_curves
from stillground.products.figures.positions import is_star
from stillground.products.report.drawing import Chart, limits, minus
from stillground.products.report.encoding import png
from stillground.products.report.folder import Profile
from stillground.products.report.ground import CHANGE, colours
from stillground.products.report.picture import draw_places
from stillground.products.units import labelled, unit_text, with_unit
from stillground.protocols import Array

SIZE = (400.0, 250.0)
LIMIT = 3.0
_MOST_DOTS = 4000
_LISTED = 12
_LIGHT = 0.5


@dataclass(frozen=True)
class Shown:
    """A chart and what is written below it."""

    picture: Markup
    caption: str


@dataclass(frozen=True)
class Outlier:
    """A datum that counts less than half."""

    row: int
    groups: tuple[int, ...]
    residual: float
    weight: float


def fit_charts(profile: Profile) -> list[Shown]:
    """All charts of the fit that the table allows."""
    fit, groupings = profile.fit, profile.groupings
    residual = fit["residual_over_error"].to_numpy(dtype=float)
    charts = [_matrix(fit, residual, groupings[:2]) if len(groupings) >= 2 else _ordered(fit, residual)]
    charts.append(_histogram(residual))
    worst = _worst(profile, residual)
    return [*charts, *(chart for chart in (worst, _curves(profile) or _offset(profile)) if chart is not None)]


def outliers(profile: Profile) -> tuple[list[Outlier], int]:
    """The data that count least, and how many count less than half."""
    light = profile.fit[profile.fit["weight"] < _LIGHT].sort_values(["weight", "row"])
    listed = [
        Outlier(
            int(record["row"]),
            tuple(int(record[name]) for name in profile.groupings),
            float(record["residual_over_error"]),
            float(record["weight"]),
        )
        for _, record in light.head(_LISTED).iterrows()
    ]
    return listed, len(light)


def extra_charts(profile: Profile) -> list[Shown]:
    """Unknowns beside the ground that have one value a group, such as statics."""
    charts = []
    for name in profile.entry.extras:
        if name not in profile.history or profile.history[name].ndim != 1:
            continue
        values, units = legible(profile.history[name].values.astype(float), profile.entry.extras[name].units)
        number = np.arange(1, values.size + 1)
        chart = Chart(
            (400, 180), (0.5, values.size + 0.5), limits(np.append(values, 0.0)), margins=(52, 10, 8, 34)
        )
        said = name.replace("_", " ")
        chart.frame(f"{said.split()[0]}, in the table's order", labelled(said, units))
        base = float(chart.up(0.0))
        chart.add("path", class_="axis", d=f"M{chart.left:.1f} {base:.1f}H{chart.right:.1f}")
        stems = "".join(
            f"M{x:.1f} {base:.1f}V{y:.1f}"
            for x, y in zip(chart.across(number), chart.up(values), strict=True)
        )
        chart.add("path", class_="stem", d=stems)
        chart.dots(number, values, "dot", 3)
        largest = int(np.argmax(np.abs(values)))
        highest = with_unit(minus(f"{values[largest]:.3g}"), units)
        caption = f"{said}: largest {highest}, number {largest + 1}"
        charts.append(Shown(chart.svg(caption), caption))
    return charts


def legible(values: Array, units: str) -> tuple[Array, str]:
    """Values and UDUNITS text with the SI prefix that makes them easy to read.

    Examples
    --------
    >>> legible(np.array([2e-5, -1.5e-4]), "s")
    (array([  20., -150.]), 'µs')
    >>> legible(np.array([0.02]), "m-1")
    (array([0.02]), 'm⁻¹')
    """
    largest = float(np.abs(values).max()) if values.size else 0.0
    # A prefix on a symbol with an exponent of its own would be raised with it.
    if largest > 0 and re.fullmatch(r"[A-Za-z]+( .*)?", units):
        for factor, prefix in ((1.0, ""), (1e3, "m"), (1e6, "µ"), (1e9, "n")):
            if largest * factor >= 1:
                return np.round(values * factor, 9), prefix + unit_text(units)
    return values, unit_text(units)


def _matrix(fit: pd.DataFrame, residual: Array, groupings: tuple[str, ...]) -> Shown:
    first, second = (fit[name].to_numpy(dtype=int) for name in groupings)
    shape = (int(first.max()), int(second.max()))
    cells = np.ravel_multi_index((first - 1, second - 1), shape)
    counts = np.bincount(cells, minlength=shape[0] * shape[1])
    sums = np.bincount(cells, residual, minlength=shape[0] * shape[1])
    mean = np.where(counts > 0, sums / np.maximum(counts, 1), np.nan).reshape(shape)
    code = np.where(
        np.isnan(mean),
        0,
        1 + np.rint((np.clip(np.nan_to_num(mean), -LIMIT, LIMIT) + LIMIT) / (2 * LIMIT) * 254),
    )
    table = np.vstack([[255, 254, 251], colours(CHANGE)[1:]]).astype(np.uint8)
    chart = Chart(SIZE, (0.5, shape[1] + 0.5), (shape[0] + 0.5, 0.5), margins=(46, 54, 8, 36))
    chart.add(
        "image",
        href=png(code.astype(np.uint8), table),
        x=chart.left, y=chart.top, width=chart.right - chart.left, height=chart.bottom - chart.top,
        preserveAspectRatio="none", class_="cells",
    )  # fmt: skip
    chart.frame(groupings[1], groupings[0], grid=False)
    steps, height = 48, chart.bottom - chart.top
    for i in range(steps):
        shade = "#" + bytes(table[1 + round(253 * i / (steps - 1))]).hex()
        y = chart.bottom - (i + 1) * height / steps
        chart.add("rect", x=chart.right + 12, y=y, width=10, height=height / steps + 0.4, fill=shade)
    for value, text in ((-LIMIT, "−3"), (0.0, "0"), (LIMIT, "+3")):
        y = chart.bottom - (value + LIMIT) / (2 * LIMIT) * height
        chart.add("text", text, x=chart.right + 26, y=min(y + 4, chart.bottom))
    said = f"Mean residual by {groupings[0]} and {groupings[1]}, in standard errors, observed less predicted"
    return Shown(chart.svg(said), said)


def _ordered(fit: pd.DataFrame, residual: Array) -> Shown:
    row = fit["row"].to_numpy(dtype=float)
    chart = Chart(SIZE, limits(row), limits(np.append(residual, [-LIMIT, LIMIT])), margins=(46, 10, 8, 36))
    chart.frame("row of the table", "residual (standard errors)")
    x, y = _thinned(row, residual)
    chart.dots(x, y, "dot", 2)
    said = "Residuals, observed less predicted, in the table's order"
    return Shown(chart.svg(said), said)


def _histogram(residual: Array) -> Shown:
    edges = np.linspace(-5, 5, 41)
    counts, _ = np.histogram(np.clip(residual, -5, 5), edges)
    at = np.linspace(-5, 5, 121)
    normal = residual.size * 0.25 * np.exp(-(at**2) / 2) / np.sqrt(2 * np.pi)
    top = 1.08 * max(float(counts.max()), float(normal.max()))
    chart = Chart(SIZE, (-5, 5), (0, top), margins=(46, 10, 8, 36))
    chart.frame("residual (standard errors)", "data")
    x, y = chart.across(edges), chart.up(counts)
    bars = "".join(
        f"M{left + 0.5:.1f} {chart.bottom:.1f}V{high:.1f}H{right - 0.5:.1f}V{chart.bottom:.1f}z"
        for left, right, high in zip(x[:-1], x[1:], y, strict=True)
    )
    chart.add("path", class_="bars", d=bars)
    chart.line(at, normal, "fitted")
    mean, spread = minus(f"{residual.mean():.2f}"), f"{residual.std():.2f}"
    said = (
        f"Residuals: mean {mean}, spread {spread} (0 and 1 where errors are stated right); "
        f"dashed: the unit normal"
    )
    return Shown(chart.svg(said), said)


def _worst(profile: Profile, residual: Array) -> Shown | None:
    """The group whose mean residual is the least likely: observed over predicted along the other grouping."""
    fit = profile.fit
    found: list[tuple[float, str, int]] = []
    for name in profile.groupings[:2]:
        numbers = fit[name].to_numpy(dtype=int)
        counts, sums = np.bincount(numbers), np.bincount(numbers, residual)
        score = np.abs(sums) / np.sqrt(np.maximum(counts, 1))
        # With one datum a group there is nothing to draw a line through.
        score[counts < 3] = -1
        found.append((float(score.max()), name, int(score.argmax())))
    if not found or max(found)[0] < 0:
        return None
    _, name, number = max(found)
    rows = fit[name].to_numpy(dtype=int) == number
    others = [other for other in profile.groupings if other != name and _places(fit, other)]
    along, label = fit["row"].to_numpy(dtype=float), "row of the table"
    if others:
        columns = _places(fit, others[0])
        label = max(columns, key=lambda column: float(np.ptp(fit[column].to_numpy(dtype=float)[rows])))
        along = fit[label].to_numpy(dtype=float)
        label = _words(label)
    (observed, predicted), datum, unit = _data(fit)
    order = np.argsort(along[rows], kind="stable")
    x, seen, told = along[rows][order], observed[rows][order], predicted[rows][order]
    chart = Chart(SIZE, limits(x), limits(np.concatenate([seen, told])), margins=(52, 10, 8, 36))
    chart.frame(label, labelled(datum, unit))
    chart.line(x, told)
    chart.dots(x, seen, "observed", 3)
    chart.dots(x, seen, "hollow", 1.8)
    mean = float(residual[rows].mean())
    said = (
        f"Worst {name}, number {number}: mean residual {minus(f'{mean:+.2f}')} standard errors "
        f"over {int(rows.sum())} data. Dots observed, line predicted"
    )
    return Shown(chart.svg(said), said)


def _curves(profile: Profile) -> Shown | None:
    """Data against distance along the line, one curve for each source; None where there is no such line."""
    fit, section = profile.fit, profile.section
    if "surface_altitude" not in section or "distance" not in profile.dims:
        return None
    (observed, predicted), datum, unit = _data(fit)
    curves = data_curves(
        groupings={name: np.unique(fit[name], return_inverse=True)[1] for name in profile.groupings},
        positions=places(profile),
        surface=(section["distance"].values, section["surface_altitude"].values),
        datum=datum,
        unit=unit,
        si_factor=1.0,
        observed=observed,
        # The table has them only relative to residuals, and they are not drawn.
        errors=np.full(len(fit), np.nan),
        predicted=predicted,
        weights=fit["weight"].to_numpy(dtype=float),
    )
    if curves is None or curves.predicted is None:
        return None
    drawn = curves.drawn
    shown = np.isin(curves.number, drawn)
    data = np.concatenate([curves.observed, curves.predicted])
    low, high = limits(data)
    across = limits(np.concatenate([curves.distance, curves.starts[drawn]]))
    chart = Chart(SIZE, across, (0.0 if data.min() >= 0 else low, high), margins=(52, 10, 8, 36))
    chart.frame(f"distance of the {curves.along} (m)", labelled(datum, unit))
    for number in drawn:
        for side in curves.branches(int(number)):
            chart.line(curves.distance[side], curves.predicted[side], "curve faint")
    light = curves.light & shown
    if light.any():
        for kind, radius in (("dot", 4.0), ("hollow", 3.0)):
            chart.dots(curves.distance[light], curves.observed[light], kind, radius)
    chart.dots(curves.distance[shown], curves.observed[shown], "observed", 1.3)
    starts = curves.starts[drawn]
    draw_places(chart, {curves.of: np.column_stack([starts, np.full(starts.size, chart.y[0])])})
    sign = "stars" if is_star(curves.of) else "triangles"
    said = f"{datum.capitalize()} against distance, a curve for each {curves.of} ({sign}): dots observed, "
    said += "lines predicted"
    said += "; ringed: count less than half" if light.any() else ""
    said += "" if drawn.size == curves.numbers.size else f"; {drawn.size} of {curves.numbers.size} drawn"
    return Shown(chart.svg(said), said)


def _offset(profile: Profile) -> Shown | None:
    """Data against the distance between the places of the first two groupings: the time-distance curve."""
    fit = profile.fit
    placed = [name for name in profile.groupings if _places(fit, name)]
    if len(placed) < 2:
        return None
    first, second = (fit[_places(fit, name)].to_numpy(dtype=float) for name in placed[:2])
    offset = np.linalg.norm(first - second, axis=1)
    (observed, predicted), datum, unit = _data(fit)
    x, seen, told = _thinned(offset, observed, predicted)
    chart = Chart(SIZE, limits(x), limits(np.concatenate([seen, told])), margins=(52, 10, 8, 36))
    chart.frame(f"from {placed[0]} to {placed[1]} (m)", labelled(datum, unit))
    chart.dots(x, seen, "observed", 2.2)
    chart.dots(x, told, "predicted", 1.1)
    some = "" if x.size == offset.size else f"; {x.size} of {offset.size} data drawn"
    said = f"{datum.capitalize()} against distance: large dots observed, small predicted{some}"
    return Shown(chart.svg(said), said)


def _places(fit: pd.DataFrame, grouping: str) -> list[str]:
    return [str(name) for name in fit.columns if re.fullmatch(rf"{re.escape(grouping)}_\w+ \[m\]", str(name))]


def _data(fit: pd.DataFrame) -> tuple[tuple[Array, Array], str, str]:
    """Observed and predicted, the datum's name and its unit."""
    for column in fit.columns:
        match = re.fullmatch(r"observed_(.+) \[(.+)\]", str(column))
        if match and f"predicted_{match[1]} [{match[2]}]" in fit:
            pair = (
                fit[f"{end}_{match[1]} [{match[2]}]"].to_numpy(dtype=float)
                for end in ("observed", "predicted")
            )
            observed, predicted = pair
            return (observed, predicted), match[1].replace("_", " "), unit_text(match[2])
    zeros = np.zeros(len(fit))
    return (fit["residual_over_error"].to_numpy(dtype=float), zeros), "residual", "standard errors"


def _words(column: str) -> str:
    return column.replace("_", " ").replace("[", "(").replace("]", ")")


def _thinned(*columns: Array) -> tuple[Array, ...]:
    stride = -(-columns[0].size // _MOST_DOTS)
    return tuple(column[:: max(stride, 1)] for column in columns)


def places(profile: Profile) -> dict[str, Array]:
    """Where the groups stand, by grouping, shape (n_groups, n_axes): distance and elevation, or elevation."""
    fit, found = profile.fit, {}
    for name in profile.groupings:
        columns = _places(fit, name)
        if len(columns) == len(profile.dims):
            first = fit.drop_duplicates(name).sort_values(name)
            found[name] = first[columns].to_numpy(dtype=float)
    return found
