"""A section thinned to what people and programs can handle one by one."""

from __future__ import annotations

import math

import numpy as np
import xarray as xr

MOST = 40_000
"""Nodes from which on a section is thinned."""


def thinned(section: xr.Dataset) -> xr.Dataset:
    """Every n-th row and column of a section, and its last ones, so that not many more than `MOST` remain."""
    stride = math.ceil(math.sqrt(section["elevation"].size * section["distance"].size / MOST))
    kept = {
        name: np.unique(np.r_[0 : section.sizes[name] : stride, section.sizes[name] - 1])
        for name in ("elevation", "distance")
    }
    return section.isel(kept)
