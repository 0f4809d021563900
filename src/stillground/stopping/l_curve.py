"""Stop at the corner of misfit against roughness."""

from __future__ import annotations

import warnings

import numpy as np
from scipy.interpolate import make_splrep

from stillground.protocols import History, Pick, RuleOptions

_LEAST_ROWS = 6
_CORNER = 2.0
# The spline keeps to the logarithms by one percent, root mean square.
_NEARNESS = 0.01


def l_curve(history: History, options: RuleOptions) -> Pick:
    """The greatest curvature of log roughness against log misfit, on a spline over iterations.

    It needs neither the size of the errors nor degrees of freedom, and goes wrong more often than rules
    that have them. The pick is weak where no corner stands out: where the greatest curvature is less
    than twice that anywhere else, or lies at an end.

    References
    ----------
    Hansen (1992), Analysis of discrete ill-posed problems by means of the L-curve, SIAM Review 34.
    """
    # Row 0 has no roughness, and a vanishing residual no logarithm.
    rows = np.flatnonzero((history.solution_norm > 0) & (history.residual_norm > 0))
    if rows.size < _LEAST_ROWS:
        return Pick.does_not_apply(f"{rows.size} iterations, too few for a corner")
    # Equal steps in the logarithm of the iteration: the curve is passed ever more slowly.
    at = np.log(rows)
    with warnings.catch_warnings():
        # Where the nearness is not met to a thousandth: of no account here.
        warnings.simplefilter("ignore", RuntimeWarning)
        misfit, rough = (
            make_splrep(at, np.log(norms[rows]), k=3, s=rows.size * _NEARNESS**2)
            for norms in (history.residual_norm, history.solution_norm)
        )
    fine = np.linspace(at[0], at[-1], 20 * rows.size)
    dx, dy = misfit(fine, 1), rough(fine, 1)
    speed = np.maximum(dx**2 + dy**2, np.finfo(float).tiny) ** 1.5
    # Positive where the way turns from falling misfit to growing roughness.
    curvature = (misfit(fine, 2) * dy - dx * rough(fine, 2)) / speed
    k = int(np.argmax(curvature))
    pick = float(np.exp(fine[k]))
    away = np.abs(fine - fine[k]) > np.log(2)
    others = float(curvature[away].max(initial=0.0))
    if k in (0, fine.size - 1) or curvature[k] <= 0:
        return Pick(min(pick, float(history.last)), False, "no corner between the ends of the curve")
    if curvature[k] < _CORNER * others:
        return Pick(pick, False, "the curve is flat: it turns nearly as much elsewhere")
    if others * 99 <= curvature[k]:
        return Pick(pick, True, "the only corner")
    return Pick(pick, True, f"a corner, {curvature[k] / others:.2g} times sharper than any other")
