"""Publication figures, one look for all: drawn on sheets in our style, saved as PNG and PDF."""

from __future__ import annotations

from pathlib import Path

from stillground.products.figures.ladder import ladder_figure
from stillground.products.figures.residuals import residuals_figure
from stillground.products.figures.rules import rules_figure
from stillground.products.figures.section import section_figure
from stillground.products.figures.sheet import write_figure
from stillground.products.raster import Surface
from stillground.protocols import Array, Result


def write_figures(
    folder: Path,
    profile: str,
    result: Result,
    *,
    tolerance: float,
    tau: float,
    surface: Surface | None,
    sources: Array,
    receivers: Array,
) -> tuple[Path, ...]:
    """Write ``<profile>_section``, ``_rules``, ``_ladder`` and ``_residuals`` as PNG and PDF.

    Parameters
    ----------
    folder : Path
        Is created.
    profile : str
    result : Result
        On axes (distance, elevation).
    tolerance, tau : float
        Of the refinement and of the discrepancy rule.
    surface : pair of arrays (distance, elevation), m, or None
    sources, receivers : array, shapes (n_sources, 2), (n_receivers, 2)
        Distance and elevation, m.

    Raises
    ------
    OutputError
        When the place cannot be written.
    """
    figures = {
        "section": section_figure(
            profile, result, tolerance=tolerance, surface=surface, sources=sources, receivers=receivers
        ),
        "rules": rules_figure(profile, result, tau=tau),
        "ladder": ladder_figure(profile, result, tolerance=tolerance, surface=surface),
        "residuals": residuals_figure(profile, result),
    }
    return tuple(
        path for name, figure in figures.items() for path in write_figure(folder, f"{profile}_{name}", figure)
    )
