"""How wrong the answer may be place by place: by the noise, on ground like the prior; and what comes back."""

from __future__ import annotations

from matplotlib.colors import Normalize
from matplotlib.figure import Figure
from matplotlib.lines import Line2D

from stillground.products.figures.field import hatch_key, shown_name
from stillground.products.figures.maps import (
    ERROR_COLOURS,
    GAP,
    GOOD_COLOURS,
    Map,
    draw_maps,
    error_scale,
    shown_anomaly,
    tiling,
)
from stillground.products.figures.sheet import FOOT, HEADING, INK, sheet, styled
from stillground.products.raster import Surface, ground
from stillground.products.reading import shown_change
from stillground.products.reliability import reliability
from stillground.products.units import labelled, with_unit
from stillground.protocols import Result

ROOM = (6.5, 6.6)
HALF = 0.5


@styled
def errors_figure(profile: str, result: Result, *, tolerance: float, surface: Surface | None) -> Figure:
    """Noise part and, after a rehearsal, total error and resolved fraction, side by side.

    Errors are in the unit that people read the property in, as m/s, on one scale.

    Parameters
    ----------
    profile : str
    result : Result
        On axes (distance, elevation) or (elevation,).
    tolerance : float
        As for `picture_dataset`.
    surface : pair of arrays (distance, elevation), m, or None
    """
    flags = reliability(result, tolerance, ground(result.axes, surface))
    seen, rehearsal = result.property, result.rehearsal
    name, units = shown_name(seen)
    errors = {"Noise part": shown_change(seen, result.model, result.noise_part)}
    said = "Noise part: scatter of the answer under the noise, not its error"
    if rehearsal is None:
        said += "; for that, set rehearsal.twins = 30"
    else:
        errors["Total error"] = shown_change(seen, result.model, rehearsal.total_error)
        said += ". Total error: root mean square on synthetic ground drawn from the prior"
    anomaly = f"{shown_anomaly(result):.3g}"
    said += ". Rms anomaly: " + with_unit(anomaly, units).replace(" ", "\N{NO-BREAK SPACE}")
    scale = error_scale(result, list(errors.values()), flags)
    label = labelled(f"of {name}", units)
    maps = [Map(title, label, values, scale, ERROR_COLOURS) for title, values in errors.items()]
    lines = []
    if rehearsal is not None:
        lines = [Line2D([], [], color=INK, lw=0.8, label="half comes back")]
        maps.append(
            Map(
                "Resolved fraction",
                "share that comes back",
                rehearsal.resolved,
                Normalize(0, 1),
                GOOD_COLOURS,
                (HALF,),
            )
        )

    tiles = tiling(len(maps), result.axes, ROOM, GAP)
    bottom = FOOT + 0.42
    figure = sheet(
        7.4,
        bottom + tiles.rows * (tiles.height + GAP[1]) + HEADING,
        f"{profile}: error bars",
        said,
    )
    used = tiles.columns * (tiles.width + GAP[0]) - GAP[0]
    draw_maps(
        figure,
        maps,
        result.axes,
        tiles,
        (0.65 + (ROOM[0] - used) / 2, bottom),
        flags=flags,
        surface=surface,
    )
    hatch_key(figure, flags, lines)
    return figure
