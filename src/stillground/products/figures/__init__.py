"""Publication figures, one look for all: drawn on sheets in our style, saved as PNG and PDF."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from functools import partial
from pathlib import Path
from typing import Any

from matplotlib.figure import Figure

from stillground.products.data_curves import DataCurves
from stillground.products.figures.column import column_figure
from stillground.products.figures.distance import distance_figure
from stillground.products.figures.errors import errors_figure
from stillground.products.figures.ladder import ladder_figure
from stillground.products.figures.pattern import pattern_figure
from stillground.products.figures.rehearsal import rehearsal_figure
from stillground.products.figures.residuals import residuals_figure
from stillground.products.figures.rules import rules_figure
from stillground.products.figures.section import section_figure
from stillground.products.figures.sensitivity import sensitivity_figure
from stillground.products.figures.sheet import write_figure
from stillground.products.figures.steps import steps_figure
from stillground.products.overlay import Overlay
from stillground.products.picture import product
from stillground.products.raster import Surface
from stillground.protocols import Array, Differences, Pattern, Rehearsal, Result, RuleOptions


def figures(
    profile: str,
    result: Result,
    *,
    tolerance: float,
    options: RuleOptions,
    surface: Surface | None,
    positions: Mapping[str, Array],
    differences: Differences | None = None,
    known: Overlay | None = None,
    curves: DataCurves | None = None,
) -> dict[str, Callable[[], Figure]]:
    """What draws the figures of a result, by their names; nothing is drawn before it is called.

    ``section`` (of a column ``column``), ``errors``, ``rules``, ``ladder`` and ``residuals`` always,
    ``<datum>_distance``, ``steps``, ``rehearsal`` and ``sensitivity`` where there are such.

    Parameters
    ----------
    profile : str
    result : Result
        On axes (distance, elevation) or (elevation,).
    tolerance : float
        Of the refinement, relative to the anomaly.
    options : RuleOptions
        As the rules took them.
    surface : pair of arrays (distance, elevation), m, or None
    positions : mapping of str to array, shape (n, n_axes)
        Places by what stands there, m.
    differences : Differences, optional
        In a column, the usual estimate to draw behind the answer.
    known : Overlay, optional
        Known ground to draw over it.
    curves : DataCurves, optional
        The data against distance along the line.
    """
    on_ground: dict[str, Any] = {"tolerance": tolerance, "surface": surface}
    placed = on_ground | {"positions": positions, "known": known}
    picture = (
        partial(column_figure, profile, result, differences=differences, **placed)
        if len(result.axes) == 1
        else partial(section_figure, profile, result, **placed)
    )
    drawn: dict[str, Callable[[], Figure]] = {
        product(len(result.axes)): picture,
        "errors": partial(errors_figure, profile, result, **on_ground),
        "rules": partial(rules_figure, profile, result, options=options),
        "ladder": partial(ladder_figure, profile, result, **on_ground),
        "residuals": partial(residuals_figure, profile, result),
    }
    if result.outer_steps is not None:
        drawn["steps"] = partial(steps_figure, profile, result, result.outer_steps)
    if curves is not None:
        drawn[curves.name] = partial(distance_figure, profile, curves)
    if result.rehearsal is not None:
        drawn["rehearsal"] = partial(rehearsal_figure, profile, result.rehearsal, result.chosen.rule)
    if result.sensitivity is not None:
        drawn["sensitivity"] = partial(sensitivity_figure, profile, result, **on_ground)
    return drawn


def write_figures(folder: Path, profile: str, drawn: Mapping[str, Callable[[], Figure]]) -> tuple[Path, ...]:
    """Draw figures and write them as PNG and PDF ``<profile>_<name>`` into ``folder``, which is created.

    Raises
    ------
    OutputError
        When the place cannot be written.
    """
    return tuple(
        path for name, draw in drawn.items() for path in write_figure(folder, f"{profile}_{name}", draw())
    )


def write_rehearsal_figure(folder: Path, profile: str, rehearsal: Rehearsal, chosen: str) -> Path:
    """Write `rehearsal_figure` as PNG and PDF ``<profile>_rehearsal``, and give the path of the PNG."""
    return write_figure(folder, f"{profile}_rehearsal", rehearsal_figure(profile, rehearsal, chosen))[0]


def write_pattern_figure(
    folder: Path,
    profile: str,
    patterns: tuple[Pattern, ...],
    axes: tuple[Array, ...],
    *,
    surface: Surface | None,
) -> Path:
    """Write `pattern_figure` as PNG and PDF ``<profile>_pattern``, and give the path of the PNG."""
    figure = pattern_figure(profile, patterns, axes, surface=surface)
    return write_figure(folder, f"{profile}_pattern", figure)[0]
