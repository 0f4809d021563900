"""How well the data determine single unknowns beside the ground, such as a delay."""

from __future__ import annotations

import numpy as np
from scipy.sparse.linalg import LinearOperator, cg

from stillground.protocols import Array
from stillground.reconstruct import Reconstruction, prepare

# Far more than rays take; an early end tells a deviation that is too large.
_MOST_STEPS = 500
_NEARNESS = 1e-6


def extra_deviations(reconstruction: Reconstruction) -> dict[str, float]:
    """Posterior standard deviations of extra unknowns that stand alone, in their own units.

    They include what the ground may take over of such an unknown and, where the background is fitted, what
    that may. The reconstruction stops short of the posterior mean, so its values scatter a little more.

    Returns
    -------
    dict of str to float
        By name; unknowns of many values, such as statics, are left out.

    Notes
    -----
    With unit prior deviations, ``K = A A^T + noise^2 I``, a the unknown's own column of A and c the response
    to a background of one: ``1 - a . K^-1 a + (a . K^-1 c)^2 / (c . K^-1 c)``, the last term for a background
    of unknown size, as in universal kriging.

    References
    ----------
    Tarantola (2005), Inverse Problem Theory (posterior covariance of a linear problem). Matheron (1969), Le
    krigeage universel.
    """
    measurement, method, grid = reconstruction.measurement, reconstruction.method, reconstruction.grid
    single = [extra for extra in measurement.extras if extra.response.shape[1] == 1]
    if not single:
        return {}
    n_data = measurement.data.size
    operator = prepare(measurement, grid, method, products=_MOST_STEPS).operator
    noise = reconstruction.noise**2
    covariance = LinearOperator(
        (n_data, n_data), matvec=lambda u: operator.matvec(operator.rmatvec(u)) + noise * u, dtype=float
    )

    def solved(column: Array) -> Array:
        return np.asarray(cg(covariance, column, rtol=_NEARNESS, maxiter=_MOST_STEPS)[0])

    constant = measurement.operator.matvec(np.ones(grid.n_nodes)) / measurement.errors
    fitted = method.background is None and measurement.background is None
    weighted = solved(constant) if fitted else np.zeros(n_data)
    size = float(constant @ weighted) or 1.0
    found = {}
    for extra in single:
        column = extra.deviation * extra.response[:, 0] / measurement.errors
        share = 1.0 - float(column @ solved(column)) + float(column @ weighted) ** 2 / size
        found[extra.name] = extra.deviation * float(np.sqrt(max(share, 0.0)))
    return found
