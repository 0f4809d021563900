"""Stop where data left out would be predicted best."""

from __future__ import annotations

from stillground.protocols import History, Pick, RuleOptions
from stillground.stopping.minimum import minimum, still_falling


def gcv(history: History, options: RuleOptions) -> Pick:
    """The minimum of generalised cross-validation with the true degrees of freedom.

    It does not need the size of the errors, only their ratios. Between iterations the minimum is that
    of the parabola through its neighbours, so that picks on different grids can be compared. The pick
    is weak where the curve stays within 1 % of its minimum over half as many iterations again.
    ``gcv_factor`` above 1 counts degrees of freedom dearer and stops earlier.

    References
    ----------
    Golub, Heath & Wahba (1979), Generalized cross-validation as a method for choosing a good ridge
    parameter, Technometrics 21. Girard (1989), Numer. Math. 56 (degrees of freedom by random vectors).
    """
    curve = history.gcv(options.gcv_factor)
    if curve is None:
        return Pick.does_not_apply("this run has no degrees of freedom")
    lowest = minimum(curve)
    if lowest.iteration == 0:
        return Pick(
            0.0, False, "no iterate predicts better than the background: the data say nothing of the ground"
        )
    if lowest.at_end:
        return still_falling(history)
    words = "a clear minimum" if lowest.sharp else "the curve is flat"
    return Pick(lowest.iteration, lowest.sharp, f"{words}, {lowest.span}")
