"""Stop where an estimate of the error from the data alone is least."""

from __future__ import annotations

import numpy as np

from stillground.protocols import History, Pick, RuleOptions
from stillground.stopping.minimum import minimum, still_falling


def hanke_raus(history: History, options: RuleOptions) -> Pick:
    """The minimum of ``sqrt(q_k(0)) |r_k|``, with q_k the polynomial of the iterate.

    ``q_k(0)``, how much of the smallest singular values' data comes in, bounds the noise's part of the
    error from k on and the residual stands for the rest. It needs neither the size of the errors nor
    degrees of freedom, and stops early.

    References
    ----------
    Hanke & Raus (1996), A general heuristic for choosing the regularization parameter in ill-posed
    problems, SIAM J. Sci. Comput. 17.
    """
    if history.filter_slope is None:
        return Pick.does_not_apply("the method is no polynomial of the operator")
    if history.last < 2:
        return Pick.does_not_apply(f"{history.last} iterations are too few")
    lowest = minimum(np.sqrt(np.maximum(history.filter_slope, 0.0)) * history.residual_norm, first=1)
    if lowest.at_end:
        return still_falling(history)
    if lowest.iteration <= 1:
        return Pick(1.0, False, "least at the first iterate already: the estimate tells nothing here")
    words = "a clear minimum" if lowest.sharp else "the curve is flat"
    return Pick(lowest.iteration, lowest.sharp, f"{words}, {lowest.span}")
