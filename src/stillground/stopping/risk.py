"""Stop where the fit is expected to be nearest to the data without their noise."""

from __future__ import annotations

from stillground.protocols import History, Pick, RuleOptions
from stillground.stopping.minimum import minimum, still_falling


def risk(history: History, options: RuleOptions) -> Pick:
    """The minimum of the unbiased estimate of the predictive risk.

    With noise of size s: ``|r|^2 / n + 2 s^2 dof / n``, the risk but for a constant. It needs the errors of
    the data to be right.

    References
    ----------
    Mallows (1973), Some comments on C_p, Technometrics 15. Stein (1981), Estimation of the mean of a
    multivariate normal distribution, Ann. Stat. 9.
    """
    if history.degrees_of_freedom is None:
        return Pick.does_not_apply("this run has no degrees of freedom")
    curve = history.chi_square + 2 * options.noise**2 * history.degrees_of_freedom / history.n_data
    lowest = minimum(curve)
    if lowest.at_end:
        return still_falling(history)
    words = "a clear minimum" if lowest.sharp else "the curve is flat"
    firm = lowest.sharp and lowest.iteration > 0
    return Pick(lowest.iteration, firm, f"{words}, {lowest.span}; {options.proviso}")
