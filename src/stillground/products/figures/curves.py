"""A nodal field of one axis as a curve against elevation: what a picture is to a section."""

from __future__ import annotations

from typing import Any

import numpy as np
from matplotlib.axes import Axes
from matplotlib.colors import to_rgb
from matplotlib.ticker import MaxNLocator
from numpy.typing import NDArray

from stillground.products.figures.field import FADE, HATCHES
from stillground.products.figures.sheet import INK, PAPER
from stillground.products.raster import Surface, altitude
from stillground.products.reliability import RELIABLE
from stillground.protocols import Array


def draw_curve(
    axes: Axes, elevation: Array, values: Array, *, flags: NDArray[np.int8] | None, colour: Any, **style: Any
) -> None:
    """Draw values against elevation; what is not reliable is faded, and hatched behind.

    Parameters
    ----------
    axes : Axes
    elevation : array, shape (n_nodes,)
        Of the nodes, m, ascending.
    values : array, shape (n_nodes,)
    flags : array of int8, shape (n_nodes,), or None
        From `reliability`.
    colour : colour of the plotting library
    **style
        Of the line.
    """
    style = {"lw": 1.6, "zorder": 3} | style
    if flags is not None:
        axes.plot(values, elevation, color=faded(colour), **{**style, "label": None})
        values = np.where(flags == RELIABLE, values, np.nan)
    axes.plot(values, elevation, color=colour, **style)


def draw_band(
    axes: Axes, elevation: Array, low: Array, high: Array, *, flags: NDArray[np.int8], colour: Any
) -> None:
    """Fill between two curves; what is not reliable is faded."""
    for paint, here in ((faded(colour), flags != RELIABLE), (colour, flags == RELIABLE)):
        axes.fill_betweenx(elevation, low, high, where=here, color=paint, lw=0, zorder=1)


def faded(colour: Any) -> Array:
    """A colour blended with paper, as unreliable ground is in pictures."""
    return np.asarray((1 - FADE) * np.array(to_rgb(colour)) + FADE * np.array(to_rgb(PAPER)))


def hatch_column(axes: Axes, elevation: Array, flags: NDArray[np.int8]) -> None:
    """Hatch the elevations that are not reliable, from side to side."""
    for flag, hatch in HATCHES.items():
        here = flags == flag
        if here.any():
            axes.fill_betweenx(
                elevation,
                0,
                1,
                where=here,
                transform=axes.get_yaxis_transform(),
                facecolor=PAPER,
                edgecolor="#8e979d",
                hatch=hatch,
                lw=0,
                zorder=0,
            )


def frame_column(axes: Axes, elevation: Array, surface: Surface | None) -> None:
    """Frame the extent of the nodes, up to the surface, which is drawn."""
    top = float(elevation[-1])
    if surface is not None:
        top = min(top, float(altitude(np.zeros(1), surface)[0]))
        axes.axhline(top, color=INK, lw=1.2, clip_on=False)
    axes.set_ylim(float(elevation[0]), top)
    axes.locator_params(axis="y", steps=[1, 2, 5, 10])
    axes.xaxis.set_major_locator(MaxNLocator(4, steps=[1, 2, 5, 10]))
