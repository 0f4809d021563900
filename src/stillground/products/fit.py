"""``<profile>_fit.csv``: every datum, what the answer predicts for it, and how far apart they are."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from stillground.protocols import Result
from stillground.whole import whole


def fit_table(
    result: Result, *, rows: NDArray[np.integer], datum: str, unit: str, si_factor: float
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

    Returns
    -------
    pandas.DataFrame
        ``row``, ``observed_<datum> [<unit>]``, ``predicted_<datum> [<unit>]``,
        ``residual_over_error`` (observed less predicted, over the standard error as stated) and
        ``weight``: 1, but less for outliers.
    """
    return pd.DataFrame(
        {
            "row": rows,
            f"observed_{datum} [{unit}]": result.observed / si_factor,
            f"predicted_{datum} [{unit}]": result.predicted / si_factor,
            "residual_over_error": (result.observed - result.predicted) / result.errors,
            "weight": result.weights,
        }
    )


def write_fit(folder: Path, name: str, table: pd.DataFrame) -> Path:
    """Write ``<name>_fit.csv`` into ``folder``; `OutputError` when the place cannot be written."""
    path = folder / f"{name}_fit.csv"
    with whole(path) as temporary:
        # Nine digits: more than any datum has, and rounding noise of the last bits stays out.
        table.to_csv(temporary, index=False, float_format="%.9g", lineterminator="\n", encoding="utf-8")
    return path
