"""What residuals say of the stated errors: their size, and constants that sources or receivers share."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import replace

import numpy as np

from stillground.protocols import Array, History, Integers, Pick

_LEAST, _MOST = 0.1, 3.0


def noise_size(history: History, iteration: float) -> float:
    """Estimated size of the errors over what is stated, ``sqrt(|r|^2 / (n - dof))`` at an iteration.

    At the pick of generalised cross-validation it needs no trust in the errors.

    References
    ----------
    Wahba (1983), Bayesian "confidence intervals" for the cross-validated smoothing spline, J. R. Stat.
    Soc. B 45.
    """
    rows = np.arange(history.residual_norm.size)
    square = float(np.interp(iteration, rows, history.residual_norm**2))
    freedom = 0.0
    if history.degrees_of_freedom is not None:
        freedom = float(np.interp(iteration, rows, history.degrees_of_freedom))
    return math.sqrt(square / max(history.n_data - freedom, 1.0))


def questioned(pick: Pick, history: History, noise: float) -> Pick:
    """The pick, no longer firm where the misfit there is far from what errors of the size ``noise`` leave.

    A rule may see a sharp corner or minimum far from any sensible misfit. A tenth of the errors' square is
    left over only where nine tenths of the data are followed, and three times it where ground is left out.
    """
    if not pick.firm or pick.iteration is None or noise == 0:
        return pick
    misfit = float(np.interp(pick.iteration, np.arange(history.last + 1), history.chi_square)) / noise**2
    if _LEAST <= misfit <= _MOST:
        return pick
    fault = "it follows the noise" if misfit < _LEAST else "ground is left out"
    why = f"{pick.reason}; but the misfit there is {misfit:.2g} times that of the errors: {fault}"
    return replace(pick, firm=False, reason=why)


def shared_constants(residual: Array, groupings: Mapping[str, Integers]) -> dict[str, float]:
    """By grouping, the mean over groups of ``n_group mean^2`` over the residual's variance.

    White residuals give about 1, less what the ground has fitted; statics of one error give about 5.

    Parameters
    ----------
    residual : array, shape (n_data,)
    groupings : mapping of str to integer array, shape (n_data,)
    """
    variance = float(np.mean(residual**2)) or 1.0
    found = {}
    for name, group in groupings.items():
        sizes = np.bincount(group)
        sums = np.bincount(group, weights=residual)
        several = sizes > 1
        if several.sum() > 1:
            found[name] = float(np.mean(sums[several] ** 2 / sizes[several])) / variance
    return found
