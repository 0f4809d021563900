"""The section as a figure: what the ground looks like, and where not to believe it."""

from __future__ import annotations

from collections.abc import Mapping

from matplotlib.cm import ScalarMappable
from matplotlib.figure import Figure

from stillground.products.figures.aspect import elevation_label, proportions
from stillground.products.figures.field import FIELD_COLOURS, colour_scale, draw_field, hatch_key
from stillground.products.figures.known import draw_known
from stillground.products.figures.positions import draw_positions, position_key
from stillground.products.figures.rays import draw_rays
from stillground.products.figures.sheet import FOOT, HEADING, panel, sheet, styled
from stillground.products.overlay import Overlay
from stillground.products.raster import Surface, ground
from stillground.products.reading import shown
from stillground.products.reliability import reliability
from stillground.products.units import labelled
from stillground.protocols import Array, Result

LARGEST = (6.4, 5.6)
LEAST_WIDTH = 5.6


@styled
def section_figure(
    profile: str,
    result: Result,
    *,
    tolerance: float,
    surface: Surface | None,
    positions: Mapping[str, Array],
    known: Overlay | None = None,
) -> Figure:
    """The answer with positions, bent rays, surface and colour bar; unreliable ground faded and hatched.

    Parameters
    ----------
    profile : str
    result : Result
        On axes (distance, elevation).
    tolerance : float
        As for `picture_dataset`.
    surface : pair of arrays (distance, elevation), m, or None
    positions : mapping of str to array, shape (n, 2)
        Distance and elevation by what stands there, m.
    known : Overlay, optional
        Points with a value are filled by the colours of the section, others are crosses.
    """
    flags = reliability(result, tolerance, ground(result.axes, surface))
    values, long_name, units = shown(result.property, result.model)
    scale = colour_scale(values, flags)

    across, up = proportions(result.axes)
    inches = min(LARGEST[0] / across, LARGEST[1] / up)
    width, height = across * inches, up * inches
    whole_width = max(width + 1.95, LEAST_WIDTH)
    left = (whole_width - width - 0.75) / 2 + 0.05
    verdict = result.ladder.verdict
    bottom = FOOT + 0.85
    figure = sheet(
        whole_width,
        bottom + height + HEADING + 0.3,
        profile,
        f"{verdict.word.capitalize()}: {verdict.reason}",
        verdict.word,
    )

    axes = panel(figure, left, bottom, width, height)
    draw_field(axes, result.axes, values, scale, flags=flags, surface=surface, pixels=700)
    rays = [] if not result.rays else [draw_rays(axes, result.rays)]
    draw_positions(axes, positions)
    chosen = result.chosen
    axes.set(
        xlabel="distance (m)",
        ylabel=elevation_label(result.axes),
        title=f"{long_name.capitalize()} at the pick of {chosen.rule}, iteration {chosen.iteration:.3g}",
    )
    bar = figure.colorbar(
        ScalarMappable(scale, FIELD_COLOURS), cax=panel(figure, left + width + 0.18, bottom, 0.14, height)
    )
    bar.set_label(labelled(long_name, units))
    bar.outline.set_linewidth(0.5)

    signs = [*position_key(positions), *rays]
    if known is not None:
        signs += draw_known(axes, known, scale)
    hatch_key(figure, flags, signs)
    return figure
