"""Where sources and receivers stand, on any picture of the section."""

from __future__ import annotations

from typing import Any

from matplotlib.axes import Axes

from stillground.products.figures.sheet import INK, RUST
from stillground.protocols import Array

SOURCE: dict[str, Any] = {"marker": "*", "ms": 6.5, "mfc": RUST, "mec": "white", "mew": 0.4, "ls": ""}
RECEIVER: dict[str, Any] = {"marker": "v", "ms": 4.2, "mfc": "white", "mec": INK, "mew": 0.7, "ls": ""}


def draw_positions(axes: Axes, sources: Array, receivers: Array) -> None:
    """Draw positions given as (distance, elevation), m, shapes (n_sources, 2) and (n_receivers, 2)."""
    axes.plot(*receivers.T, **RECEIVER, clip_on=False, zorder=4)
    axes.plot(*sources.T, **SOURCE, clip_on=False, zorder=4)
