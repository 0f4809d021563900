"""The verdict on the grid: a pure function of how the answer moved from rung to rung."""

from __future__ import annotations

import math
from collections.abc import Sequence

from stillground.protocols import Verdict

_SHRINKING = 1.2
_FLOOR = 0.1


def _order(change: Sequence[float]) -> float | None:
    if not all(0 < step < math.inf for step in change[-2:]):
        return None
    return math.log2(change[-2] / change[-1])


def judge(change: Sequence[float], pick_drift: float | None, tolerance: float) -> Verdict:
    """Says whether the answer is free of the grid.

    Parameters
    ----------
    change : sequence of float
        Relative L2 change between successive rungs at equal iteration, coarse to fine; each rung
        halves the spacing.
    pick_drift : float or None
        Relative change on the finest rung between its own pick and that of the rung before; None
        where the rule found none.
    tolerance : float
        Relative change that counts as none.

    Returns
    -------
    Verdict
        *settled* when what further refinement would still change and the drift of the pick are
        within the tolerance, and the changes either shrink at order 1 or better or have come under a
        tenth of the tolerance; *drifting* when the changes exceed the tolerance and do not shrink (by
        less than a factor 1.2); *undecided* otherwise.

    Notes
    -----
    With p the observed order, ``log2`` of the ratio of the last two changes, what remains is
    ``change / (2^p - 1)``, the sum of the changes to come. Where the last change is at the floor and
    p tells nothing, it stands for what remains.

    References
    ----------
    Roache (1994), Perspective: a method for uniform reporting of grid refinement studies, J. Fluids
    Eng. 116; Richardson (1911) for the extrapolation.
    """
    if len(change) < 2:
        rungs = len(change) + 1
        return Verdict("undecided", f"{rungs} rung{'s' * (rungs > 1)} cannot tell: at least 3 are needed "
                       f"(refinement.levels)", None, None)  # fmt: skip
    order = _order(change)
    last, percent = change[-1], f"{100 * change[-1]:.2g} %"
    at_floor = last <= _FLOOR * tolerance
    remaining: float | None
    if order is not None and order > 0 and not (at_floor and order < 1):
        remaining = last / (change[-2] / last - 1)
    else:
        remaining = last if at_floor else None

    if last > tolerance and change[-2] < _SHRINKING * last:
        return Verdict(
            "drifting",
            f"halving the spacing still changes the picture by {percent}, and the changes do not shrink "
            f"(the one before was {100 * change[-2]:.2g} %): the answer depends on the grid; "
            f"take a smoother prior (ground.smoothness) or a rule that stops earlier",
            order,
            remaining,
        )
    faults = []
    if remaining is None:
        faults.append(f"the last change of {percent} is not smaller than the one before")
    elif remaining > tolerance:
        faults.append(f"further refinement would still change the picture by about {100 * remaining:.2g} %")
    if not at_floor and order is not None and 0 < order < 1:
        faults.append(f"the changes shrink slowly (order {order:.2f})")
    if pick_drift is None:
        faults.append("the chosen rule found no pick on one of the two finest rungs")
    elif pick_drift > tolerance:
        faults.append(f"the stop itself moves the picture by {100 * pick_drift:.2g} % from rung to rung")
    if faults:
        return Verdict("undecided", "; ".join(faults), order, remaining)
    if at_floor:
        how = "at the floor, where the rate of shrinking no longer matters"
    else:
        how = f"and the changes shrink at order {order:.1f}"
    return Verdict(
        "settled",
        f"halving the spacing once more changed the picture by {percent}, {how}",
        order,
        remaining,
    )
