"""The constant ground that fits the data best: the prior mean where none is given."""

from __future__ import annotations

import numpy as np

from stillground.protocols import Measurement


def fit_background(measurement: Measurement) -> float:
    """Weighted least-squares constant, in the unit of the ground property.

    Notes
    -----
    With a = A 1, the response to a ground of one everywhere:
    ``sum(a d / errors^2) / sum(a^2 / errors^2)``.
    """
    response = measurement.operator @ np.ones(measurement.operator.shape[1])
    weights = measurement.errors**-2.0
    return float((weights * response) @ measurement.data / ((weights * response) @ response))
