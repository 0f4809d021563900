"""Known ground over a picture: values in the colours of the answer, and marks with their names."""

from __future__ import annotations

from typing import Any

import pandas as pd
from matplotlib.axes import Axes
from matplotlib.colors import Normalize
from matplotlib.lines import Line2D

from stillground.products.figures.field import FIELD_COLOURS
from stillground.products.figures.sheet import INK, PAPER
from stillground.products.overlay import Overlay

_VALUE: dict[str, Any] = {"marker": "s", "ms": 4.5, "mec": INK, "mew": 0.6, "ls": ""}
_MARK: dict[str, Any] = {"marker": "_", "ms": 9, "mec": INK, "mew": 1.2, "ls": ""}


def draw_known(axes: Axes, known: Overlay, scale: Normalize) -> list[Line2D]:
    """Draw known ground on a section, and give what its signs mean."""
    valued, marks = _parts(known)
    axes.scatter(
        valued["distance"], valued["z"], c=FIELD_COLOURS(scale(valued["known"])), marker="s", s=20,
        edgecolors=INK, linewidths=0.6, zorder=5,
    )  # fmt: skip
    axes.plot(marks["distance"], marks["z"], **_MARK, zorder=5)
    _names(axes, marks)
    return _key(valued, marks)


def draw_known_beside(axes: Axes, known: Overlay) -> list[Line2D]:
    """Draw known ground on a column, whose values are its horizontal axis."""
    valued, marks = _parts(known)
    axes.plot(valued["known"], valued["z"], **_VALUE, mfc=PAPER, zorder=5)
    for level in marks["z"]:
        axes.axhline(level, color=INK, lw=0.7, ls=(0, (5, 3)), zorder=1)
    _names(axes, marks, axes.get_xlim()[0])
    return _key(valued, marks)


def _parts(known: Overlay) -> tuple[pd.DataFrame, pd.DataFrame]:
    has = known.table["known"].notna()
    return known.table[has], known.table[~has]


def _names(axes: Axes, marks: pd.DataFrame, across: float | None = None) -> None:
    """Each name once, at the first of its points; ``across`` in place of their distance."""
    for _, row in marks[marks["name"] != ""].drop_duplicates("name").iterrows():
        axes.annotate(
            str(row["name"]),
            (float(row["distance"]) if across is None else across, float(row["z"])),
            (5, 2),
            textcoords="offset points",
            size=6.5,
            color=INK,
            bbox={"facecolor": PAPER, "alpha": 0.8, "lw": 0, "pad": 0.8},
            zorder=6,
        )


def _key(valued: pd.DataFrame, marks: pd.DataFrame) -> list[Line2D]:
    signs = ((valued, _VALUE | {"mfc": PAPER}, "known value"), (marks, _MARK, "known mark"))
    return [Line2D([], [], **sign, label=label) for part, sign, label in signs if len(part)]
