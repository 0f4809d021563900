"""Outlying data found by reweighting: a few of them would move every rule that trusts the errors."""

from __future__ import annotations

import math
from collections.abc import Generator
from dataclasses import replace

import numpy as np

from stillground.grid import Grid
from stillground.protocols import Array, Measurement, Progress
from stillground.reconstruct.reconstruction import Method, reconstruct
from stillground.stopping.gcv import gcv

_BIWEIGHT, _HUBER = 4.685, 1.345
# Mean of weight times square of normal data, E[(1 - z^2/c^2)^2 z^2] with the normal moments 1, 3, 15.
BIWEIGHT_ENERGY = 1 - 2 * 3 / _BIWEIGHT**2 + 15 / _BIWEIGHT**4
# Likewise E[min(1, c/|z|) z^2] = P(|z| < c).
HUBER_ENERGY = math.erf(_HUBER / math.sqrt(2))
_MAD_TO_DEVIATION = 1.4826
_PASSES = 4
_SETTLED = 0.01
# Normal residuals pass 5 deviations once in two million data.
_WILD, _LEAST_WILD = 5.0, 2


def reweighted(measurement: Measurement, weights: Array) -> Measurement:
    """The measurement with errors divided by the square roots of weights (0 to 1).

    Where data are weighted, all are scaled so that the mean squared residual of normal data stays 1.
    """
    return replace(measurement, errors=weighted_errors(measurement.errors, weights))


def weighted_errors(errors: Array, weights: Array, energy: float = BIWEIGHT_ENERGY) -> Array:
    """The errors that `reweighted` gives, shape (n_data,); ``energy`` is the weights' with normal data."""
    return errors / _applied(weights, energy)


def _applied(weights: Array, energy: float = BIWEIGHT_ENERGY) -> Array:
    factor = np.sqrt(np.maximum(weights, 1e-6))
    return factor if np.all(weights == 1) else factor / np.sqrt(energy)


def some_wild(residual: Array) -> bool:
    """Whether at least two residuals pass 5 robust standard deviations."""
    return int(np.sum(np.abs(residual) > _WILD * _deviation(residual))) >= _LEAST_WILD


def biweight(residual: Array) -> Array:
    """Tukey's biweight of residuals, at 4.685 robust standard deviations, shape (n_data,).

    References
    ----------
    Beaton & Tukey (1974), The fitting of power series, Technometrics 16.
    """
    scaled = residual / (_BIWEIGHT * _deviation(residual))
    return np.where(np.abs(scaled) < 1, (1 - scaled**2) ** 2, 0.0)


def huber(residual: Array) -> Array:
    """Huber's weights of residuals, at 1.345 robust standard deviations, shape (n_data,).

    They are never 0, so that residuals of ground still to be found are not given up as outliers are.

    References
    ----------
    Huber (1964), Robust estimation of a location parameter, Annals of Mathematical Statistics 35.
    """
    return np.asarray(1 / np.maximum(np.abs(residual) / (_HUBER * _deviation(residual)), 1))


def find_outliers(
    measurement: Measurement, grid: Grid, method: Method, *, always: bool
) -> Generator[Progress, None, Array]:
    """Weights of the data by Tukey's biweight, reweighted in 2 to 4 passes; all one where none is wild.

    Residuals are those at the pick of generalised cross-validation, which outliers hardly move.

    Parameters
    ----------
    measurement : Measurement
    grid : Grid
    method : Method
    always : bool
        Otherwise data are reweighted only when at least two residuals pass 5 robust standard deviations.

    Returns
    -------
    array, shape (n_data,)
        Between 0 and 1.
    """
    method = replace(method, rules={"gcv": gcv}, choose="gcv")
    weights = np.ones_like(measurement.data)
    for passed in range(_PASSES):
        found = yield from reconstruct(reweighted(measurement, weights), grid, method)
        # In stated errors: those of data that are all but left out would hide them.
        residual = found.run.residual(found.stop("gcv")) / _applied(weights)
        if passed == 0 and not always and not some_wild(residual):
            return weights
        before, weights = weights, biweight(residual)
        if passed and float(np.abs(weights - before).max()) < _SETTLED:
            break
    return weights


def _deviation(residual: Array) -> float:
    """The robust standard deviation of residuals: of normal data that of their middle half."""
    return _MAD_TO_DEVIATION * float(np.median(np.abs(residual - np.median(residual)))) or 1.0
