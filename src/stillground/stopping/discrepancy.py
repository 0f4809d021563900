"""Stop where the residual is as large as the errors say."""

from __future__ import annotations

import math

from stillground.protocols import History, Pick, RuleOptions


def _crossing(history: History, target: float) -> float | None:
    """Fractional iteration at which the residual norm first falls to ``target``, None if never."""
    norms = history.residual_norm
    below = [k for k in range(norms.size) if norms[k] <= target]
    if not below:
        return None
    k = below[0]
    if k == 0:
        return 0.0
    start, end, step = norms[k - 1] ** 2, norms[k] ** 2, history.residual_step[k] ** 2
    # |r + t (r' - r)|^2 = target^2 for the smaller root t.
    slope = end - start - step
    root = math.sqrt(max(slope**2 - 4 * step * (start - target**2), 0.0))
    return float(k - 1 + min(max(2 * (start - target**2) / (root - slope), 0.0), 1.0))


def discrepancy(history: History, options: RuleOptions) -> Pick:
    """The fractional iterate whose mean squared whitened residual is ``tau^2`` exactly.

    It needs the errors of the data to be right. The pick is weak where errors misjudged by 5 % would
    move it by more than half.

    References
    ----------
    Morozov (1966), On the solution of functional equations by the method of regularization, Soviet
    Math. Dokl. 7.
    """
    aim = (options.tau * options.noise) ** 2
    target = math.sqrt(aim * history.n_data)
    pick = _crossing(history, target)
    chi_square = float(history.chi_square[-1])
    if pick is None:
        more = f"; {history.advice}" if history.ended else ", or solver.iterations too few"
        return Pick(
            None,
            False,
            f"never reached: the misfit is {chi_square:.3g} after {history.last} iterations, the target "
            f"{aim:.3g}; the errors may be too small{more}",
        )
    if pick == 0:
        return Pick(
            0.0,
            False,
            "the background alone fits within the errors: they may be too large, or the ground even",
        )
    early = _crossing(history, 1.05 * target)
    late = _crossing(history, target / 1.05)
    if early is not None and late is not None and late <= 1.5 * max(early, 1.0):
        return Pick(
            pick, True, f"the misfit falls to {aim:.3g}; errors 5 % off would stop between "
            f"{early:.1f} and {late:.1f}",
        )  # fmt: skip
    shown = "never" if late is None else f"at {late:.1f}"
    return Pick(
        pick,
        False,
        f"the misfit is flat here: errors 5 % larger would stop at {early:.1f}, 5 % smaller {shown}",
    )
