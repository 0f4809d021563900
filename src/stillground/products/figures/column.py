"""The column as a figure: what the ground looks like down a hole, how sure, and what practice reads off."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace

import numpy as np
from matplotlib.artist import Artist
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.patches import Patch
from matplotlib.ticker import MaxNLocator

from stillground.products.averages import read_averages
from stillground.products.figures.curves import draw_band, draw_curve, frame_column, hatch_column
from stillground.products.figures.field import hatch_key
from stillground.products.figures.known import draw_known_beside
from stillground.products.figures.positions import draw_positions, position_key
from stillground.products.figures.sheet import FOOT, HEADING, TEAL, panel, sheet, styled
from stillground.products.overlay import Overlay
from stillground.products.raster import Surface, ground
from stillground.products.reading import shown, shown_change
from stillground.products.reliability import RELIABLE, reliability
from stillground.products.units import labelled, unit_text
from stillground.protocols import Array, Differences, Result

SIZE = (5.6, 5.6)
"""Of the panel, inches."""
LINE_STEP = 0.16
BAND, STEPS = "#bcd3cf", "#a08a6a"


@styled
def column_figure(
    profile: str,
    result: Result,
    *,
    tolerance: float,
    surface: Surface | None,
    positions: Mapping[str, Array],
    differences: Differences | None,
    known: Overlay | None = None,
) -> Figure:
    """The answer with its error band, before the usual estimate; unreliable ground faded and hatched.

    Parameters
    ----------
    profile : str
    result : Result
        On axes (elevation,).
    tolerance : float
        As for `picture_dataset`.
    surface : pair of arrays (distance, elevation), m, or None
        Of one point.
    positions : mapping of str to array, shape (n, 1)
        Elevations by what stands there, m.
    differences : Differences or None
    known : Overlay, optional
        Values as squares, other points as dashes.
    """
    (elevation,) = result.axes
    inside = ground(result.axes, surface)
    flags = reliability(result, tolerance, inside)
    values, long_name, units = shown(result.property, result.model)
    if result.rehearsal is None:
        error, band = result.noise_part, "± noise part of the error, which is not all of it"
    else:
        error, band = result.rehearsal.total_error, "± total error"
    spread = shown_change(result.property, result.model, error)

    averages = [replace(mean, units=unit_text(mean.units)).sentence for mean in read_averages(result)]
    verdict, chosen = result.ladder.verdict, result.chosen
    # The key of signs at the foot takes a second row with those of known ground.
    bottom = FOOT + (1.1 if differences is None else 1.25) + (0.0 if known is None else LINE_STEP)
    figure = sheet(
        SIZE[0] + 1.2,
        bottom + SIZE[1] + LINE_STEP * len(averages) + HEADING + 0.3,
        profile,
        f"{verdict.word.capitalize()}: {verdict.reason}",
        verdict.word,
    )
    axes = panel(figure, 0.75, bottom, *SIZE)
    hatch_column(axes, elevation, flags)
    draw_band(axes, elevation, values - spread, values + spread, flags=flags, colour=BAND)
    key: list[Artist] = [Line2D([], [], color=TEAL, lw=1.6, label=long_name), Patch(color=BAND, label=band)]
    sure = inside & (flags == RELIABLE) if (flags == RELIABLE).any() else inside
    steps = np.empty(0)
    if differences is not None:
        steps = shown(result.property, np.where(differences.values > 0, differences.values, np.nan))[0]
    across = _limits((values - spread)[sure], (values + spread)[sure], values[sure], steps)
    if differences is not None:
        ends = np.column_stack([differences.lower, differences.upper]).reshape(-1)
        axes.plot(np.repeat(steps, 2), ends, color=STEPS, lw=0.7, zorder=2)
        missing = int(np.isnan(steps).sum())
        beyond = int(np.sum((steps < across[0]) | (steps > across[1])))
        said = differences.long_name + (f"; {missing} not above zero left out" if missing else "")
        said += f"; {beyond} of {steps.size} reach beyond the frame" if beyond else ""
        key.append(Line2D([], [], color=STEPS, lw=0.7, label=said))
    draw_curve(axes, elevation, values, flags=flags, colour=TEAL)
    draw_positions(axes, positions)
    frame_column(axes, elevation, surface)
    axes.xaxis.set_major_locator(MaxNLocator(7, steps=[1, 2, 5, 10]))
    axes.set(
        xlim=across,
        xlabel=labelled(long_name, units),
        ylabel="elevation (m)",
        title="\n".join(
            [
                f"{long_name.capitalize()} at the pick of {chosen.rule}, iteration {chosen.iteration:.3g}",
                *(said[0].upper() + said[1:] for said in averages),
            ]
        ),
    )
    axes.legend(
        handles=key,
        loc="upper left",
        bbox_to_anchor=(0, -0.42 / SIZE[1]),
        borderaxespad=0,
        ncols=1,
    )
    signs = position_key(positions)
    if known is not None:
        signs += draw_known_beside(axes, known)
    hatch_key(figure, flags, signs)
    return figure


def _limits(low: Array, high: Array, values: Array, steps: Array) -> tuple[float, float]:
    """Room for the band and the middle nine tenths of the steps: some of these fly far."""
    kept = np.concatenate([low, high, values])
    if np.isfinite(steps).any():
        kept = np.append(kept, np.nanquantile(steps, [0.05, 0.95]))
    least, most = float(np.nanmin(kept)), float(np.nanmax(kept))
    margin = 0.05 * (most - least) or abs(most) or 1.0
    return least - margin, most + margin
