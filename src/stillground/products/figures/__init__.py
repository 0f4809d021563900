"""Publication figures, one look for all: drawn on sheets in our style, saved as PNG and PDF."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path

from stillground.products.figures.column import column_figure
from stillground.products.figures.errors import errors_figure
from stillground.products.figures.ladder import ladder_figure
from stillground.products.figures.pattern import pattern_figure
from stillground.products.figures.rehearsal import rehearsal_figure
from stillground.products.figures.residuals import residuals_figure
from stillground.products.figures.rules import rules_figure
from stillground.products.figures.section import section_figure
from stillground.products.figures.sensitivity import sensitivity_figure
from stillground.products.figures.sheet import write_figure
from stillground.products.picture import product
from stillground.products.raster import Surface
from stillground.protocols import Array, Differences, Pattern, Rehearsal, Result, RuleOptions


def write_figures(
    folder: Path,
    profile: str,
    result: Result,
    *,
    tolerance: float,
    options: RuleOptions,
    surface: Surface | None,
    positions: Mapping[str, Array],
    differences: Differences | None = None,
) -> tuple[Path, ...]:
    """Write the figures of a result as PNG and PDF.

    ``<profile>_section`` (of a column ``_column``), ``_errors``, ``_rules``, ``_ladder`` and ``_residuals``
    always, ``_rehearsal`` and ``_sensitivity`` where the result has them.

    Parameters
    ----------
    folder : Path
        Is created.
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

    Raises
    ------
    OutputError
        When the place cannot be written.
    """
    if len(result.axes) == 1:
        picture = column_figure(
            profile,
            result,
            tolerance=tolerance,
            surface=surface,
            positions=positions,
            differences=differences,
        )
    else:
        picture = section_figure(profile, result, tolerance=tolerance, surface=surface, positions=positions)
    figures = {
        product(len(result.axes)): picture,
        "errors": errors_figure(profile, result, tolerance=tolerance, surface=surface),
        "rules": rules_figure(profile, result, options=options),
        "ladder": ladder_figure(profile, result, tolerance=tolerance, surface=surface),
        "residuals": residuals_figure(profile, result),
    }
    if result.rehearsal is not None:
        figures["rehearsal"] = rehearsal_figure(profile, result.rehearsal, result.chosen.rule)
    if result.sensitivity is not None:
        figures["sensitivity"] = sensitivity_figure(profile, result, tolerance=tolerance, surface=surface)
    return tuple(
        path for name, figure in figures.items() for path in write_figure(folder, f"{profile}_{name}", figure)
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
