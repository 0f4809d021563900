"""Datasets to NetCDF files: one encoding for all products, whole or not at all."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import xarray as xr

from stillground.whole import whole

# Values from which on a row gains by compression.
_LONG = 1000


def write_netcdf(dataset: xr.Dataset, path: Path) -> None:
    """Write a flat NetCDF-4 file.

    Numbers over two or more dimensions are compressed, in chunks of one map each, and so are long rows.
    Floating data has ``_FillValue`` NaN; coordinates, counts and text have none. A variable's own
    encoding may give ``dtype`` and ``_FillValue``.

    Raises
    ------
    OutputError
        When the place cannot be written.
    """
    encoding = {str(name): _encoding(variable) for name, variable in dataset.variables.items()}
    for name in dataset.coords:
        encoding[str(name)]["_FillValue"] = None
    with whole(path) as temporary:
        try:
            dataset.to_netcdf(temporary, engine="netcdf4", encoding=encoding)
        except RuntimeError as error:
            # The library's word for a full disk.
            raise OSError(f"{path} cannot be written ({error}); is the disk full?") from error


def _encoding(variable: xr.Variable) -> dict[str, Any]:
    encoding: dict[str, Any] = {"_FillValue": np.nan if variable.dtype.kind == "f" else None}
    encoding |= {key: variable.encoding[key] for key in ("dtype", "_FillValue") if key in variable.encoding}
    if variable.ndim >= 2 or (variable.size >= _LONG and variable.dtype.kind in "fiu"):
        leading = max(variable.ndim - 2, 0)
        encoding |= {
            "zlib": True,
            "complevel": 4,
            "shuffle": True,
            "chunksizes": (1,) * leading + variable.shape[leading:],
        }
    return encoding
