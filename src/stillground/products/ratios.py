"""How a rule fared on the twins of a rehearsal, in three numbers."""

from __future__ import annotations

import numpy as np

from stillground.protocols import Array


def ratio_numbers(ratios: Array) -> dict[str, float]:
    """Median, 90th percentile and worst of errors over the best iterate's, shape (n_twins,).

    Examples
    --------
    >>> ratio_numbers(np.array([1.0, 1.25, 1.5, 1.0, 3.5, 1.0, 1.0, 1.25, 1.25, 1.25, 1.5]))
    {'median': 1.25, 'p90': 1.5, 'worst': 3.5}
    """
    median, ninety, worst = np.percentile(ratios, [50, 90, 100])
    return {"median": float(median), "p90": float(ninety), "worst": float(worst)}
