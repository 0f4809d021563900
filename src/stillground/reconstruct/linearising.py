"""The outer loop of a nonlinear measurement: linear ones, each about the answer of the one before."""

from __future__ import annotations

from collections.abc import Generator, Sequence
from dataclasses import dataclass, replace
from itertools import islice
from typing import Literal

import numpy as np
from pylops import LinearOperator

from stillground.grid import Grid
from stillground.protocols import Array, Measurement, NonlinearMeasurement, OuterSteps, Progress
from stillground.reconstruct.outliers import biweight, huber, some_wild, weighted_errors
from stillground.reconstruct.reconstruction import Method, prior
from stillground.solve.cgls import cgls
from stillground.standard_form import StandardForm, standard_form

Outliers = Literal["auto", "tukey", "off"]

# A linearisation is trusted for this fall of chi-square, no further.
_FALL = 0.25
# Chi-square by the nonlinear measurement is at its target when it is so near.
_NEAR, _TOLD = 1.1, 1.25
_OUTER, _INNER, _HALVINGS = 20, 60, 5
# Two steps in a row that bring less than this part of the fall they aim at fit what is no ground.
_STALLED = 0.25
_PASSES, _SETTLED = 8, 0.05
# Of a logarithm, a factor of seven: what is farther from a linearisation is nonsense.
_FARTHEST = 2.0
# In parts of the way from the prior mean.
_STILL = 2e-3


@dataclass(frozen=True)
class Linearised:
    """What the outer loop leaves on one grid.

    Parameters
    ----------
    measurement : Measurement
        The last linearisation with the stated errors, centred on the prior mean: operator J at u_K, data
        ``d - F(u_K) + J u_K``.
    field : array, shape (n_nodes,)
        The model u_K that the last step led to.
    steps : OuterSteps
    weights : array, shape (n_data,)
        Of the data, 1 but for outliers.
    reached : bool
        Whether chi-square came to 1, within a quarter.
    reason : str
        How the loop ended, in words.
    """

    measurement: Measurement
    field: Array
    steps: OuterSteps
    weights: Array
    reached: bool
    reason: str


def linearise(
    measurement: NonlinearMeasurement,
    grid: Grid,
    method: Method,
    *,
    targets: Sequence[float] | None = None,
    weights: Array | None = None,
    outliers: Outliers = "off",
) -> Generator[Progress, None, Linearised]:
    """Fits a nonlinear measurement by linear ones in standard form, until chi-square is 1.

    Gauss-Newton with increments: each linearisation is solved from the model it is made at, by CGLS that
    ends where the linear misfit meets the step's target exactly; the step is halved until the nonlinear
    misfit falls. One last linearisation, centred on the prior mean, is left for the rules to judge.
    Only the prior's covariance is taken from ``method``, its mean from the measurement.

    Parameters
    ----------
    measurement : NonlinearMeasurement
    grid : Grid
    method : Method
    targets : sequence of float, optional
        Chi-squares to aim at, a step each and no more: the rungs of a ladder are comparable when all make
        the same steps. Default: each step aims at a quarter of chi-square, down to 1.
    weights : array, shape (n_data,), optional
        Of the data, kept throughout.
    outliers : "auto", "tukey" or "off"
        Without ``weights``: Huber's weights at each step to begin with, then Tukey's biweight until it
        rests; with "auto" only when at least two residuals turn out wild, else all weights are 1.

    Yields
    ------
    Progress

    Returns
    -------
    Linearised
        A target that is not reached is told in its reason.

    References
    ----------
    Hanke (1997), A regularizing Levenberg-Marquardt scheme, with applications to inverse groundwater
    filtration problems, Inverse Problems 13 (each step aims at a fixed part of the misfit before).
    """
    if weights is None:
        weights = np.ones_like(measurement.data)
        if outliers != "off":
            _, residual = yield from _steps(measurement, grid, method, None, None)
            if outliers == "tukey" or some_wild(residual):
                weights = biweight(residual)
                for _ in range(_PASSES):
                    _, residual = yield from _steps(measurement, grid, method, None, weights)
                    before, weights = weights, biweight(residual)
                    if float(np.abs(weights - before).max()) < _SETTLED:
                        break
    found, _ = yield from _steps(measurement, grid, method, targets, weights)
    return found


def linearised_at(
    measurement: NonlinearMeasurement, field: Array, mean: Array | None = None
) -> tuple[Measurement, Array]:
    """The linear measurement that touches a nonlinear one at a field, and the data over that field.

    ``mean`` is its prior mean, by default the nonlinear measurement's.
    """
    predicted, operator = measurement.linearise(field)
    linear = Measurement(
        operator,
        measurement.data - predicted + operator.matvec(field),
        measurement.errors,
        measurement.groupings,
        measurement.extras,
        measurement.start if mean is None else mean,
    )
    return linear, predicted


def _steps(
    measurement: NonlinearMeasurement,
    grid: Grid,
    method: Method,
    targets: Sequence[float] | None,
    weights: Array | None,
) -> Generator[Progress, None, tuple[Linearised, Array]]:
    """The loop, and its last residual in stated errors; without weights Huber's of each step."""
    data, errors = measurement.data, measurement.errors
    field = measurement.start
    # What extra unknowns add to the data.
    beside = np.zeros_like(data)
    linear, predicted = linearised_at(measurement, field)
    root: LinearOperator | None = None
    aims: list[float] = []
    misfits: list[float] = []
    inner: list[Array] = []
    slow, ended = 0, ""
    while True:
        residual = data - predicted - beside
        counted = huber(residual / errors) if weights is None else weights
        fitted = replace(linear, data=linear.data - beside, errors=weighted_errors(errors, counted))
        chi_square = _mean_square(residual / fitted.errors)
        misfits.append(chi_square)
        made = len(aims)
        yield Progress("", made, len(targets or ()) or _OUTER, f"misfit {chi_square:.3g}")
        if ended or made == (_OUTER if targets is None else len(targets)):
            break
        if targets is None and chi_square <= (_NEAR if made else 1.0):
            break
        aim = max(_FALL * chi_square, 1.0) if targets is None else targets[made]
        if root is None:
            root, _ = prior(fitted, grid, method)
        standard = standard_form(fitted, root, field)
        solution, curve = _iterate_at(standard, aim)
        step = standard.ground(solution) - field
        found = standard.extras(solution)
        constants = sum((extra.response @ found[extra.name] for extra in fitted.extras), np.zeros_like(data))
        part = min(1.0, _FARTHEST / max(float(np.abs(step).max()), _FARTHEST))
        for _ in range(_HALVINGS):
            there = linearised_at(measurement, field + part * step)
            after = _mean_square((data - there[1] - beside - part * constants) / fitted.errors)
            if after <= max(chi_square, _NEAR * aim):
                break
            part /= 2
        else:
            ended = "no shorter step lowers it"
            break
        linear, predicted = there
        field, beside = field + part * step, beside + part * constants
        aims.append(aim)
        inner.append(curve)
        if targets is None:
            still = grid.norm(part * step) < _STILL * grid.norm(field - measurement.start)
            slow = slow + 1 if chi_square - after < _STALLED * (chi_square - aim) and after > _NEAR else 0
            ended = "further steps hardly lower it" if still or slow > 1 else ""
    made = len(aims)
    reached = misfits[-1] <= _TOLD
    reason = f"the misfit comes to {misfits[-1]:.3g} in {made} outer steps"
    if not reached:
        reason = (
            f"the misfit stays at {misfits[-1]:.3g} after {made} outer steps, its target is 1"
            f"{': ' + ended if ended else ''}"
        )
    steps = OuterSteps(tuple(misfits), tuple(aims), tuple(inner))
    return Linearised(linear, field, steps, counted, reached, reason), residual / errors


def _iterate_at(standard: StandardForm, target: float) -> tuple[Array, Array]:
    """The CGLS iterate, shape (n_unknowns,), between steps, whose mean squared residual is the target.

    Also the mean squares of its residual at the iterations up to there.
    """
    aim = target * standard.b.size
    x, r = np.zeros(standard.operator.shape[1]), standard.b
    curve = [_mean_square(r)]
    for step in islice(cgls(standard.operator, standard.b[:, None]), 1, _INNER + 1):
        before, left = x, r
        x, r = step.solution[:, 0], step.residual[:, 0]
        curve.append(max(_mean_square(r), target))
        if r @ r <= aim:
            change = r - left
            slope, excess = float(left @ change), float(left @ left) - aim
            # |left + t change|^2 = aim, the smaller root.
            t = excess / (np.sqrt(max(slope**2 - float(change @ change) * excess, 0.0)) - slope)
            x = before + t * (x - before)
            break
    return x, np.array(curve)


def _mean_square(values: Array) -> float:
    return float(np.mean(np.square(values)))
