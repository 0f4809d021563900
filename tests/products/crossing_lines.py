"""Made-up lines that cross at one place, and a bent one, for the files of a whole run."""

from __future__ import annotations

from dataclasses import replace
from datetime import UTC, datetime
from typing import Any

import numpy as np
import pandas as pd
from pyproj import CRS

from stillground.products.line import Line
from stillground.products.picture import picture_dataset
from stillground.products.provenance import Provenance
from stillground.protocols import Result

from .made_up_results import BOTTOM, SURFACE, TOP, WIDTH

PROVENANCE = Provenance(
    title="Osmere Weir, left abutment (invented)",
    config_text='title = "Osmere Weir"\n',
    command="stillground run osmere-weir.toml",
    inputs={"crosshole-ab.csv": "3f2a" * 16},
    versions={"stillground": "0.1.0", "numpy": "2.0.0"},
    created=datetime(2026, 12, 1, 5, 10, tzinfo=UTC),
    cautions="The rule l-curve is weak here.",
)

# Where lines cross, in each CRS's unit: the middle of its zone.
CENTRES: dict[str | None, tuple[float, float]] = {
    "EPSG:32631": (430_000.0, 5_700_000.0),
    "EPSG:27700+5701": (430_000.0, 400_000.0),
    "EPSG:32756": (334_000.0, 6_250_000.0),
    "EPSG:2263": (980_000.0, 200_000.0),
    None: (100.0, 200.0),
}


def unit(code: str | None) -> tuple[CRS | None, float]:
    """A CRS and its unit in m; one US survey foot is 1200/3937 m (NIST Handbook 44, from memory)."""
    return (None, 1.0) if code is None else (CRS(code), 1200 / 3937 if code == "EPSG:2263" else 1.0)


def straight(distance: np.ndarray, angle: float, middle: float) -> tuple[np.ndarray, np.ndarray]:
    """East and north, m, of a line at an angle that passes the origin at the distance ``middle``."""
    return np.cos(angle) * (distance - middle), np.sin(angle) * (distance - middle)


def bent(distance: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """East and north, m: eastwards to distance 9, then northwards."""
    return np.minimum(distance, 9.0), np.maximum(distance - 9.0, 0.0)


def make_line(
    name: str,
    result: Result,
    plan: tuple[np.ndarray, np.ndarray],
    code: str | None,
    *,
    first: float = 0.0,
    last: float = WIDTH,
    surface: Any = SURFACE,
) -> Line:
    """A profile with its trace at ``plan`` metres from the centre; two boreholes of 25 positions."""
    crs, metres = unit(code)
    centre = CENTRES[code]
    easting, northing = (c + along / metres for c, along in zip(centre, plan, strict=True))
    section = picture_dataset(
        name,
        result,
        easting=easting,
        northing=northing,
        crs=crs,
        surface=surface,
        tolerance=0.02,
        provenance=PROVENANCE,
    )
    ends = np.repeat([first, last], 25)
    stations = pd.DataFrame(
        {
            "what": np.repeat(["source", "receiver"], 25),
            "number": np.tile(np.arange(1, 26), 2),
            "x": np.interp(ends, result.axes[0], easting) * metres,
            "y": np.interp(ends, result.axes[0], northing) * metres,
            "z": np.tile(np.linspace(TOP - 1, BOTTOM + 1, 25), 2),
            "data": 25,
            "residual": np.linspace(-1, 1, 50),
            "weight": 1.0,
            "static": np.r_[np.linspace(-1e-4, 1e-4, 25), np.full(25, np.nan)],
        }
    )
    return Line(name, section, first, last, TOP, stations)


def crossing_lines(
    result: Result, code: str | None, *, first: float = 0.0, last: float = WIDTH, surface: Any = SURFACE
) -> list[Line]:
    """Lines at 0, 50 and 110 degrees that cross in their middles, the second slow, the third fast."""
    middle = (first + last) / 2
    return [
        make_line(
            name,
            replace(result, model=factor * result.model),
            straight(result.axes[0], np.radians(angle), middle),
            code,
            first=first,
            last=last,
            surface=surface,
        )
        for name, angle, factor in (("ab", 0, 1.0), ("cd", 50, 1.2), ("ef", 110, 0.85))
    ]
