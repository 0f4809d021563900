"""Stop where the residuals look most like white noise."""

from __future__ import annotations

import numpy as np

from stillground.protocols import History, Pick, RuleOptions
from stillground.stopping.minimum import minimum, still_falling

WHITE = 1.36
"""Kolmogorov-Smirnov limit that white noise keeps in 95 % of cases."""


def whiteness(history: History, options: RuleOptions) -> Pick:
    """The least distance of the residual's cumulative periodogram from that of white noise.

    The distance is the worst over the groupings: along the receivers of each source, and along the
    sources of each receiver. It needs neither the size of the errors nor degrees of freedom. The pick is
    weak where the residuals never pass as white.

    References
    ----------
    Hansen, Kilmer & Kjeldsen (2006), Exploiting residual information in the parameter choice for
    discrete ill-posed problems, BIT 46.
    """
    if not history.whiteness:
        return Pick.does_not_apply("the data are in no groups of 4 or more")
    curve = np.max(list(history.whiteness.values()), axis=0)
    lowest = minimum(curve)
    least = float(curve.min())
    if lowest.at_end:
        return still_falling(history)
    passing = np.flatnonzero(curve <= WHITE)
    if passing.size:
        reason = f"residuals pass as white (95 %) from iteration {passing[0]} to {passing[-1]}, best here"
        return Pick(lowest.iteration, lowest.iteration > 0, reason)
    reason = (
        f"residuals never pass as white: {least:.2g} at best, limit {WHITE}; "
        f"errors may be alike along a source or receiver"
    )
    return Pick(lowest.iteration, False, reason)
