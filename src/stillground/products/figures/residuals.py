"""The fit as a figure: residuals by source and receiver, against the unit normal, and their means."""

from __future__ import annotations

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from numpy.typing import NDArray

from stillground.products.figures.sheet import (
    FOOT,
    HEADING,
    INK,
    LINE,
    TEAL,
    panel,
    sheet,
    styled,
)
from stillground.protocols import Array, Integers, Result

LIMIT = 3.0


@styled
def residuals_figure(profile: str, result: Result) -> Figure:
    """Residuals, observed less predicted, in standard errors.

    Parameters
    ----------
    profile : str
    result : Result
        The first two groupings span the matrix, of those that are neither one group nor one for each
        datum; with fewer, residuals are drawn in the table's order.
    """
    residual = (result.observed - result.predicted) / result.errors
    groupings = [
        (name, numbers)
        for name, numbers in result.groupings.items()
        if 1 < int(numbers.max()) + 1 < residual.size
    ][:2]
    below = 2.1 if groupings else 0.0
    bottom = FOOT + 0.5
    spread = f"mean {residual.mean():.2f}, spread {residual.std():.2f}".replace("-", "−")
    said = (
        f"{residual.size} data. Residuals: {spread} standard errors (0 and 1 where errors are stated right)"
    )
    light = int(np.sum(result.weights < 0.5))
    if light:
        said += f"; {light} outlying {'datum counts' if light == 1 else 'data count'} less than half"
    figure = sheet(7.4, bottom + below + 2.35 + HEADING, f"{profile}: data fit", said)
    wide, high = (0.65, bottom + below, 2.75, 2.25), (4.75, bottom + below, 2.4, 2.25)
    if len(groupings) == 2:
        _matrix(figure, wide, residual, groupings)
    else:
        axes = panel(figure, *wide)
        axes.plot(np.arange(1, residual.size + 1), residual, ".", ms=3)
        axes.set(xlabel="datum, in the table's order", ylabel="residual (standard errors)")
    _histogram(panel(figure, *high), residual)
    for i, (name, numbers) in enumerate(groupings):
        _means(panel(figure, 0.65 + i * 3.65, bottom, 2.85, 1.45), residual, name, numbers)
    return figure


def _matrix(
    figure: Figure,
    place: tuple[float, float, float, float],
    residual: Array,
    groupings: list[tuple[str, Integers]],
) -> None:
    (first, rows), (second, columns) = groupings
    shape = (int(rows.max()) + 1, int(columns.max()) + 1)
    cells = np.ravel_multi_index((rows, columns), shape)
    matrix = _group_means(residual, cells, shape[0] * shape[1]).reshape(shape)
    axes = panel(figure, *place)
    image = axes.imshow(
        matrix,
        cmap="PuOr",
        vmin=-LIMIT,
        vmax=LIMIT,
        extent=(0.5, shape[1] + 0.5, shape[0] + 0.5, 0.5),
        aspect="auto",
        interpolation="none",
    )
    axes.grid(visible=False)
    axes.set(xlabel=second, ylabel=first, title="residual (standard errors)")
    left, bottom, width, height = place
    bar = figure.colorbar(image, cax=panel(figure, left + width + 0.12, bottom, 0.12, height), extend="both")
    bar.outline.set_linewidth(0.5)


def _histogram(axes: Axes, residual: Array) -> None:
    edges = np.linspace(-5, 5, 41)
    step = edges[1] - edges[0]
    axes.hist(
        np.clip(residual, edges[0], edges[-1]), edges.tolist(), color="#7c97a3", edgecolor="#fffefb", lw=0.4
    )
    at = np.linspace(edges[0], edges[-1], 201)
    normal = residual.size * step * np.exp(-(at**2) / 2) / np.sqrt(2 * np.pi)
    axes.plot(at, normal, color=LINE, lw=1.2, ls="--")
    axes.set(xlabel="residual (standard errors)", ylabel="data", title="dashed: unit normal")


def _means(axes: Axes, residual: Array, name: str, numbers: Integers) -> None:
    n_groups = int(numbers.max()) + 1
    means = _group_means(residual, numbers, n_groups)
    counts = np.bincount(numbers, minlength=n_groups)
    at = np.arange(1, n_groups + 1)
    with np.errstate(divide="ignore"):
        band = 2 / np.sqrt(counts)
    axes.fill_between(at, -band, band, step="mid", color="#dfeae6", lw=0)
    axes.axhline(0, color=INK, lw=0.6)
    axes.vlines(at, 0, means, color=TEAL, lw=1)
    axes.plot(at, means, "o", ms=3.2, color=TEAL)
    axes.set(xlabel=name, ylabel="mean residual", title=f"mean by {name}; band: two standard errors")
    axes.margins(x=0.02)


def _group_means(values: Array, groups: NDArray[np.int64], n_groups: int) -> Array:
    """Mean of each group, NaN for an empty one."""
    counts = np.bincount(groups, minlength=n_groups)
    sums = np.bincount(groups, values, minlength=n_groups)
    return np.where(counts > 0, sums / np.maximum(counts, 1), np.nan)
