"""A made-up refraction line whose times have a closed form."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
import xarray as xr

from stillground.protocols import Array

V0, K = 500.0, 60.0


def slotnick(starts: Array, ends: Array) -> Array:
    """Times in v = V0 + K depth below elevation 0 (Slotnick 1959)."""
    v1, v2 = V0 - K * starts[:, 1], V0 - K * ends[:, 1]
    square = ((ends - starts) ** 2).sum(axis=1)
    return np.asarray(np.arccosh(1 + K**2 * square / (2 * v1 * v2)) / K)


def dome(x: Array) -> Array:
    return np.asarray(2.0 - 0.002 * (x - 24.0) ** 2)


SHOTS, RECEIVERS = np.arange(0.0, 49.0, 12.0), np.arange(1.0, 48.0, 2.0)


def line(
    shots: Array = SHOTS,
    receivers: Array = RECEIVERS,
    relief: Callable[[Array], Array] = np.zeros_like,
    times: Callable[[Array, Array], Array] = slotnick,
    **columns: Any,
) -> xr.Dataset:
    """A survey due east: every shot into every receiver at another place, rows from 2 as in a file."""
    here, there = (g.ravel() for g in np.meshgrid(shots, receivers, indexing="ij"))
    here, there = here[here != there], there[here != there]
    starts, ends = (np.column_stack([at, relief(at)]) for at in (here, there))
    found = {
        "source_x": here, "source_y": 0 * here, "source_z": starts[:, 1],
        "receiver_x": there, "receiver_y": 0 * there, "receiver_z": ends[:, 1],
        "time": times(starts, ends), "time_error": 0 * here + 3e-4,
    } | columns  # fmt: skip
    return xr.Dataset(
        {name: ("datum", values) for name, values in found.items()},
        coords={"row": ("datum", np.arange(2, 2 + here.size))},
        attrs={"source": "line.csv"},
    )
