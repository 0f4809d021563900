"""The constant ground that fits the data best: the prior mean where none is given."""

from __future__ import annotations

import numpy as np

from stillground.protocols import Measurement


def fit_background(measurement: Measurement) -> float:
    """Weighted least-squares constant, in the unit of the ground property.

    Single extra unknowns, such as a delay, are fitted with it, held by their prior: they would otherwise
    go into the constant. Statics are not: level layers are constants of each group too.

    Notes
    -----
    With a = A 1, the response to a ground of one everywhere, and no extra unknowns:
    ``sum(a d / errors^2) / sum(a^2 / errors^2)``.
    """
    response = measurement.operator @ np.ones(measurement.operator.shape[1])
    single = [extra for extra in measurement.extras if extra.response.shape[1] == 1]
    extras = [extra.response * extra.deviation for extra in single]
    columns = np.column_stack([response, *extras]) / measurement.errors[:, None]
    normal = columns.T @ columns + np.diag([0.0, *np.ones(columns.shape[1] - 1)])
    right = columns.T @ (measurement.data / measurement.errors)
    # Least squares: where no datum sees a constant ground, zero fits as well as any.
    return float(np.linalg.lstsq(normal, right, rcond=None)[0][0])
