"""The verdict on the grid: pure functions of how the answer moved from rung to rung."""

from __future__ import annotations

import math
from collections.abc import Sequence

from stillground.percent import percent
from stillground.protocols import GridIndex, Verdict
from stillground.refinement.expected import BASIS
from stillground.refinement.grid_index import SAFETY

_SHRINKING = 1.2
_FLOOR = 0.1
# A change made one tenth wrong by rounding tells the order to 0.2; and one rerun tells rounding within a
# factor of about ten.
CLEAR = 10.0
# Of 60 sound ladders each, on intervals with s from 0 to 2, one in twenty was short by more than 0.35; and
# half an order is the least that a fault of principle costs, such as an edge where the theory has none.
_SHORT = 0.5


def judge(
    change: Sequence[float],
    pick_drift: float | None,
    tolerance: float,
    *,
    expected: float | None = None,
    rough: str | None = None,
    jitter: float = 0.0,
) -> Verdict:
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
    expected : float or None
        Order by `expected_order`, 0 where there is no limit; None where it is not known.
    rough : str or None
        By `rough_limit`, why an expected order is below 1.
    jitter : float
        Relative change that rounding in the iteration makes by itself.

    Returns
    -------
    Verdict
        *settled* when what further refinement would still change and the drift of the pick are
        within the tolerance, and the changes either shrink at order 1 or better or have come under a
        tenth of the tolerance or down to the jitter; *drifting* when the changes exceed the tolerance and
        do not shrink (by less than a factor 1.2, or at all where the expected order is below 1);
        *undecided* otherwise, and where there is no limit to settle at.

    Notes
    -----
    With p the observed order, ``log2`` of the ratio of the last two changes, what remains is
    ``change / (2^p - 1)``, the sum of the changes to come; p counts no higher there than expected, or than
    the 2 of the nodal functions, lest one small change promise too much. Where the last change is at the
    floor and p tells nothing, it stands for what remains. No order is told of changes up to ten times the
    jitter, nor where the last change but one is a dip: smaller than those on both sides.

    At an expected order of 1/2 single ratios scatter about 1.41: in 60 surveys of 40 intervals each, on
    three pairs of changes, 5 to 17 % were below 1.2 and 0 to 2 % below 1.

    References
    ----------
    Roache (1994), Perspective: a method for uniform reporting of grid refinement studies, J. Fluids
    Eng. 116; Richardson (1911) for the extrapolation.
    """
    if len(change) < 2:
        rungs = len(change) + 1
        reason = f"{rungs} rung{'s' * (rungs > 1)} cannot tell: at least 3 are needed (refinement.levels)"
        return Verdict("undecided", reason, None, None, expected)
    before, last = change[-2:]
    moved = percent(last)
    blur = CLEAR * jitter
    jittery = last <= blur and jitter > 0
    dip = before <= blur < last if jitter > 0 else False
    dip = dip or (len(change) > 2 and _SHRINKING * before < last and _SHRINKING * last < change[-3])
    order = None if jittery or dip else _order(before, last)
    endless = expected == 0 and last > 0
    at_floor = last <= _FLOOR * tolerance or jittery

    remaining: float | None = None
    if endless:
        pass
    elif order is not None and order > 0 and not (at_floor and order < 1):
        remaining = last / (2.0 ** min(order, expected or BASIS) - 1)
    elif at_floor:
        remaining = max(last, jitter)

    shrinking = 1.0 if expected is not None and 0 < expected < 1 else _SHRINKING
    if last > tolerance and before < shrinking * last and not (jittery or dip):
        why = f"halving the spacing still changes the picture by {moved}"
        if endless and rough is not None:
            why += f": {rough}"
        else:
            why += (
                f", and the changes do not shrink (the one before was {percent(before)}): the answer "
                f"depends on the grid; take a smoother prior (ground.smoothness) or a rule that stops earlier"
            )
        return Verdict("drifting", why, order, remaining, expected)
    faults = []
    if endless and rough is not None:
        faults.append(rough)
    elif dip and remaining is None:
        faults.append(
            f"the last change but one of {percent(before)} is too small beside the others to tell how fast "
            f"they shrink: one rung more will tell (refinement.levels)"
        )
    elif remaining is None:
        faults.append(f"the last change of {moved} is not smaller than the one before")
    elif remaining > tolerance and jittery:
        faults.append(
            f"rounding in the iteration alone moves the picture by {percent(jitter)}, so that the last "
            f"change of {moved} tells nothing: take solver.method lsqr or a rule that stops earlier"
        )
    elif remaining > tolerance:
        faults.append(f"further refinement would still change the picture by about {percent(remaining)}")
    if not at_floor and not endless and order is not None and 0 < order < 1:
        faults.append(f"the changes shrink slowly (order {order:.2f})" + (f": {rough}" if rough else ""))
    if pick_drift is None:
        faults.append("the chosen rule found no pick on one of the two finest rungs")
    elif pick_drift > tolerance:
        faults.append(f"the stop itself moves the picture by {percent(pick_drift)} from rung to rung")
    if faults:
        return Verdict("undecided", "; ".join(faults), order, remaining, expected)
    if jittery:
        how = (
            f"at the floor: rounding in the iteration alone makes {percent(jitter)}, so that no order can "
            f"be told"
        )
    elif at_floor:
        how = "at the floor, where the rate of shrinking no longer matters"
    else:
        how = f"and the changes shrink at order {order:.1f}"
    return Verdict(
        "settled",
        f"halving the spacing once more changed the picture by {moved}, {how}",
        order,
        remaining,
        expected,
    )


def compare(verdict: Verdict, index: GridIndex, tolerance: float) -> tuple[str, ...]:
    """Sentences on what does not fit: an order clearly short of the expected one, a cross-check against.

    An order is clearly short from half an order on. The index speaks against the verdict when the number
    would still move by more than the whole picture could (the norm of a picture moves no farther than the
    picture), both with the index's safety factor, or when only one of the two is within the tolerance.
    """
    notes = []
    order, expected, remaining = verdict.order, verdict.expected, verdict.remaining
    at_floor = remaining is not None and remaining <= _FLOOR * tolerance
    if order is not None and expected and order < expected - _SHORT and not at_floor:
        notes.append(
            f"the changes shrink at order {order:.1f} where theory expects {expected:.2g}; usual causes: "
            f"rungs too wide for the correlation lengths (take a finer ground.spacing), a stop so late that "
            f"the picture follows errors of the data, an iteration that rounding disturbs"
        )
    if index.index is not None and index.order is not None:
        found = f"the grid convergence index of the rms anomaly is {percent(index.index)}"
        if remaining is not None and index.index > SAFETY**2 * remaining:
            notes.append(
                f"the cross-check disagrees: {found}, while the whole picture should still change by "
                f"{percent(remaining)} only; look at the changes themselves before you trust either"
            )
        elif verdict.word == "settled" and index.index > tolerance:
            notes.append(f"the cross-check disagrees: {found}, above the tolerance of {percent(tolerance)}")
        elif index.order > BASIS + _SHORT:
            notes.append(
                f"the cross-check tells little: {found}, but its order of {index.order:.1f} is beyond the "
                f"{BASIS:g} that a grid can give, so its last change is small by chance"
            )
        elif verdict.word != "settled" and index.index <= tolerance:
            notes.append(
                f"the cross-check alone would pass: {found}, but the size of the anomaly is steadier than "
                f"its shape and its stop, by which the verdict goes"
            )
    return tuple(notes)


def _order(before: float, last: float) -> float | None:
    if not all(0 < step < math.inf for step in (before, last)):
        return None
    return math.log2(before / last)
