"""Stop where data left out would be predicted best."""

from __future__ import annotations

import numpy as np

from stillground.protocols import History, Pick, RuleOptions


def gcv(history: History, options: RuleOptions) -> Pick:
    """The minimum of generalised cross-validation with the true degrees of freedom.

    It does not need the size of the errors, only their ratios. Between iterations the minimum is that
    of the parabola through its neighbours, so that picks on different grids can be compared. The pick
    is weak where the curve stays within 1 % of its minimum over half as many iterations again.

    References
    ----------
    Golub, Heath & Wahba (1979), Generalized cross-validation as a method for choosing a good ridge
    parameter, Technometrics 21. Girard (1989), Numer. Math. 56 (degrees of freedom by random vectors).
    """
    curve = history.gcv
    if curve is None:
        return Pick(None, False, "does not apply: this run has no degrees of freedom")
    k = int(np.argmin(curve))
    if k == 0:
        return Pick(0.0, False, "no iterate predicts better than the background: the data say nothing of it")
    if k == history.last:
        return Pick(None, False, f"still falling at the last iteration, {k}: raise solver.iterations")
    before, here, after = curve[k - 1 : k + 2]
    bend = before - 2 * here + after
    pick = float(k + (0.5 * (before - after) / bend if np.isfinite(bend) and bend > 0 else 0.0))
    near = np.flatnonzero(curve <= 1.01 * here)
    span = f"within 1 % of its minimum from iteration {near[0]} to {near[-1]}"
    if near[-1] > 1.5 * max(near[0], 1) or near[-1] == history.last:
        return Pick(pick, False, f"the curve is flat: {span}")
    return Pick(pick, True, f"a clear minimum, {span}")
