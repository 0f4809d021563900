"""``<profile>_points.csv``: the section as plain points in space, for drawing programs."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import xarray as xr
from pyproj import CRS

from stillground.products import cf
from stillground.products.cells import thinned
from stillground.products.line import answers
from stillground.products.reliability import MEANINGS
from stillground.whole import whole


def points_table(section: xr.Dataset, crs: CRS | None) -> pd.DataFrame:
    """One row a node in the ground, from the top down, along the profile.

    Parameters
    ----------
    section : xarray.Dataset
        From `picture_dataset`; a large one is thinned.
    crs : CRS or None
        Its CRS.

    Returns
    -------
    pandas.DataFrame
        ``x [<unit>]``, ``y [<unit>]`` and ``z [<unit>]`` in the CRS's unit, the value that people read,
        as ``velocity [m s-1]``, and ``reliability`` in words. No line of comment goes before the header,
        since programs take the first line for it: the last column is the caution that stays with a point.
    """
    nodes = thinned(section)
    unit, metres = cf.plan_unit(crs)
    shown = answers(section)[-1]
    values = nodes[shown].to_numpy()
    row, column = np.nonzero(np.isfinite(values))
    words = np.array(MEANINGS)
    return pd.DataFrame(
        {
            f"x [{unit}]": nodes["easting"].to_numpy()[column],
            f"y [{unit}]": nodes["northing"].to_numpy()[column],
            f"z [{unit}]": nodes["elevation"].to_numpy()[row] / metres,
            f"{shown} [{section[shown].attrs['units']}]": values[row, column],
            "reliability": words[nodes["reliability"].to_numpy()[row, column]],
        }
    )


def write_points(folder: Path, name: str, table: pd.DataFrame) -> Path:
    """Write ``<name>_points.csv``: millimetres and six digits; `OutputError` where it cannot be written."""
    path = folder / f"{name}_points.csv"
    written = [
        *(map("{:.3f}".format, table.iloc[:, axis]) for axis in range(3)),
        map("{:.6g}".format, table.iloc[:, 3]),
        table.iloc[:, 4],
    ]
    rows = [",".join(table.columns), *map(",".join, zip(*written, strict=True))]
    with whole(path) as temporary:
        temporary.write_text("\n".join(rows) + "\n", encoding="utf-8", newline="\n")
    return path
