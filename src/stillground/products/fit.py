"""``<profile>_fit.csv``: every datum, what the answer predicts for it, and how far apart they are."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from stillground.protocols import Array, Result
from stillground.whole import whole


def fit_table(
    result: Result,
    *,
    rows: NDArray[np.integer],
    datum: str,
    unit: str,
    si_factor: float,
    axes: Sequence[str],
    positions: Mapping[str, Array],
) -> pd.DataFrame:
    """The fit, one row a datum.

    Parameters
    ----------
    result : Result
    rows : array of integers, shape (n_data,)
        Row of each datum in the survey table, as the user counts them.
    datum : str
        Name of the datum's column in the survey table, as ``time``.
    unit : str
        Unit of that column, as ``ms``.
    si_factor : float
        What one such unit is in SI, as 1e-3.
    axes : sequence of str
        Names of the ground's axes.
    positions : mapping of str to array, shape (n_groups, n_axes)
        Where the groups of a grouping stand, m; a grouping without places is told by its numbers alone.

    Returns
    -------
    pandas.DataFrame
        ``row``, ``observed_<datum> [<unit>]``, ``predicted_<datum> [<unit>]``,
        ``residual_over_error`` (observed less predicted, over the standard error as stated),
        ``weight`` (1, but less for outliers), and by grouping its number, counted from 1 in the table's
        order, and its place, as ``source``, ``source_distance [m]``, ``source_elevation [m]``.
    """
    columns: dict[str, NDArray[np.generic]] = {
        "row": rows,
        f"observed_{datum} [{unit}]": result.observed / si_factor,
        f"predicted_{datum} [{unit}]": result.predicted / si_factor,
        "residual_over_error": (result.observed - result.predicted) / result.errors,
        "weight": result.weights,
    }
    for grouping, numbers in result.groupings.items():
        columns[grouping] = numbers + 1
        if grouping in positions:
            places = positions[grouping][numbers]
            columns |= {f"{grouping}_{axis} [m]": places[:, i] for i, axis in enumerate(axes)}
    return pd.DataFrame(columns)


def write_fit(folder: Path, name: str, table: pd.DataFrame) -> Path:
    """Write ``<name>_fit.csv`` into ``folder``; `OutputError` when the place cannot be written."""
    path = folder / f"{name}_fit.csv"
    with whole(path) as temporary:
        # Nine digits: more than any datum has, and rounding noise of the last bits stays out.
        table.to_csv(temporary, index=False, float_format="%.9g", lineterminator="\n", encoding="utf-8")
    return path
