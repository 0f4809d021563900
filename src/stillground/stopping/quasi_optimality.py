"""Stop where the picture changes least from one iterate to the next."""

from __future__ import annotations

from stillground.protocols import History, Pick, RuleOptions
from stillground.stopping.minimum import minimum, still_falling


def quasi_optimality(history: History, options: RuleOptions) -> Pick:
    """The least step of the solution, ``|x_k - x_(k-1)|``, taken for the iterate that it leads to.

    It needs neither the size of the errors nor degrees of freedom. Before the stop the steps shrink as
    the ground comes in, after it they grow with the noise; where they do neither, it goes wrong. The
    pick is weak where the steps stay within 1 % of the least over half as many iterations again,
    or still shrink at the end.

    References
    ----------
    Tikhonov & Glasko (1964), The approximate solution of Fredholm integral equations of the first kind,
    USSR Comput. Math. Math. Phys. 4.
    """
    if history.last < 2:
        return Pick.does_not_apply(f"{history.last} iterations are too few")
    lowest = minimum(history.step_norm, first=1)
    if lowest.at_end:
        return still_falling(history)
    words = "the least step" if lowest.sharp else "steps hardly differ"
    return Pick(lowest.iteration, lowest.sharp, f"{words}, {lowest.span}")
