"""Where sources, receivers or stations stand, on any picture of the ground."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
from matplotlib.axes import Axes
from matplotlib.lines import Line2D

from stillground.products.figures.sheet import INK, RUST
from stillground.protocols import Array

_RECEIVER: dict[str, Any] = {"marker": "v", "ms": 4.2, "mfc": "white", "mec": INK, "mew": 0.7, "ls": ""}
_SOURCE: dict[str, Any] = {"marker": "*", "ms": 6.5, "mfc": RUST, "mec": "white", "mew": 0.4, "ls": ""}


def draw_positions(axes: Axes, positions: Mapping[str, Array]) -> None:
    """Draw positions by what stands there, (distance, elevation) in m; sources on top.

    Of a column, elevations alone, they stand on the left edge.
    """
    for name, places in sorted(positions.items(), key=lambda item: is_star(item[0])):
        section = places.shape[1] > 1
        across = places[:, 0] if section else np.zeros(len(places))
        where = axes.transData if section else axes.get_yaxis_transform()
        axes.plot(across, places[:, -1], **_sign(name), transform=where, clip_on=False, zorder=4)


def draw_starts(axes: Axes, name: str, along: Array) -> None:
    """Draw places by what stands there at the foot of axes over distance, ``along`` in m."""
    axes.plot(
        along,
        np.zeros(len(along)),
        **_sign(name),
        transform=axes.get_xaxis_transform(),
        clip_on=False,
        zorder=4,
    )


def is_star(name: str) -> bool:
    """Whether what stands there is drawn as a star, as sources are, and not as a triangle."""
    return name == "source"


def position_key(positions: Mapping[str, Array]) -> list[Line2D]:
    """What the signs of positions mean, for a legend."""
    return [Line2D([], [], **_sign(name), label=name) for name in positions]


def _sign(name: str) -> dict[str, Any]:
    return _SOURCE if is_star(name) else _RECEIVER
