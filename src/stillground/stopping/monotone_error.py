"""Stop while every step surely still brings the solution nearer to the truth."""

from __future__ import annotations

import math

import numpy as np

from stillground.protocols import History, Pick, RuleOptions


def monotone_error(history: History, options: RuleOptions) -> Pick:
    """The last iterate up to which the error is known to have shrunk with every step.

    A step ``x' = x + A^T z`` brings x nearer to the truth while ``(r + r') . z / (2 |z|)`` is at least the
    norm of the noise. Between iterations the bound is taken as linear. It needs the errors of the
    data to be right; as it guarantees, it stops early rather than late.

    References
    ----------
    Tautenhahn & Hämarik (1999), The use of monotonicity for choosing the regularization parameter in
    ill-posed problems, Inverse Problems 15.
    """
    if history.error_bound is None:
        return Pick.does_not_apply("the method does not give its steps in the data")
    target = options.tau * options.noise * math.sqrt(history.n_data)
    short = np.flatnonzero(history.error_bound < target)
    if short.size == 0:
        return Pick(None, False, f"never reached in {history.last} iterations: {history.advice}")
    k = int(short[0])
    if k == 1:
        return Pick(0.0, False, "no step is sure to help: the errors may be too large")
    before, here = history.error_bound[k - 1 : k + 1]
    part = (before - target) / (before - here) if np.isfinite(before) else 0.0
    pick = k - 1 + float(part)
    return Pick(pick, True, f"up to here each step surely helped; {options.proviso}")
