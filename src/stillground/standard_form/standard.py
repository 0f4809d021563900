"""The standard form: whitened data, the prior's root with the grid's weights, nothing else to know."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from pylops import Diagonal, LinearOperator

from stillground.protocols import Array, Measurement


@dataclass(frozen=True)
class StandardForm:
    """The pair (A_s, b) and the way back to the ground.

    ``operator`` is ``A_s = W A L`` (n_data, n_unknowns) and ``b = W (d - A m0)`` (n_data,): data have
    unit errors, unknowns unit prior variance.
    """

    operator: LinearOperator
    b: Array
    prior_root: LinearOperator
    background: Array

    def ground(self, solution: Array) -> Array:
        """The ground property of a solution: ``m0 + L x``, flattened, shape (n_nodes,)."""
        return np.asarray(self.background + self.prior_root.matvec(solution))


def standard_form(measurement: Measurement, prior_root: LinearOperator, background: Array) -> StandardForm:
    """Brings a linear measurement to standard form.

    Parameters
    ----------
    measurement : Measurement
    prior_root : pylops.LinearOperator, shape (n_nodes, n_unknowns)
        L, a square root of the prior covariance including the grid's quadrature weights.
    background : array, shape (n_nodes,)
        The prior mean m0.
    """
    whitening = Diagonal(1.0 / measurement.errors)
    residual = measurement.data - measurement.operator.matvec(background)
    return StandardForm(
        operator=whitening @ measurement.operator @ prior_root,
        b=whitening.matvec(residual),
        prior_root=prior_root,
        background=background,
    )
