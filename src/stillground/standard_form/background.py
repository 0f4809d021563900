"""The constant ground that fits the data best: the prior mean where none is given."""

from __future__ import annotations

import numpy as np

from stillground.protocols import Measurement

# Kernels that integrate to nothing leave rounding, some 1e-16 of what they do to other grounds.
_UNSEEN = 1e-10


def fit_background(measurement: Measurement) -> float:
    """Weighted least-squares constant, in the unit of the ground property.

    Single extra unknowns, such as a delay, are fitted with it, held by their prior: they would otherwise
    go into the constant. Statics are not: level layers are constants of each group too. It is 0 where no
    datum sees a constant, as where each is a difference.

    Notes
    -----
    With a = A 1, the response to a ground of one everywhere, and no extra unknowns:
    ``sum(a d / errors^2) / sum(a^2 / errors^2)``.
    """
    n_nodes = measurement.operator.shape[1]
    response = measurement.operator @ np.ones(n_nodes)
    signs = np.random.default_rng(0).choice([-1.0, 1.0], size=n_nodes)
    if np.linalg.norm(response) <= _UNSEEN * np.linalg.norm(measurement.operator @ signs):
        return 0.0
    single = [extra for extra in measurement.extras if extra.response.shape[1] == 1]
    extras = [extra.response * extra.deviation for extra in single]
    columns = np.column_stack([response, *extras]) / measurement.errors[:, None]
    normal = columns.T @ columns + np.diag([0.0, *np.ones(columns.shape[1] - 1)])
    return float(np.linalg.solve(normal, columns.T @ (measurement.data / measurement.errors))[0])
