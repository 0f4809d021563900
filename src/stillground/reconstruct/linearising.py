"""The outer loop of a nonlinear measurement: linear ones, each about the answer of the one before."""

from __future__ import annotations

from collections.abc import Generator, Sequence
from dataclasses import dataclass, replace
from itertools import islice
from typing import Literal

import numpy as np
from pylops import LinearOperator

from stillground.counted import counted
from stillground.grid import Grid
from stillground.protocols import Array, Measurement, NonlinearMeasurement, OuterSteps, Progress
from stillground.reconstruct.extras import beside
from stillground.reconstruct.outliers import (
    BIWEIGHT_ENERGY,
    HUBER_ENERGY,
    biweight,
    huber,
    some_wild,
    weighted_errors,
)
from stillground.reconstruct.reconstruction import Method, prior
from stillground.solve.cgls import cgls
from stillground.standard_form import StandardForm, standard_form

Outliers = Literal["auto", "tukey", "off"]

# A linearisation is trusted for this fall of chi-square, no further.
_FALL = 0.25
# Chi-square by the nonlinear measurement is at its target when it is so near.
_NEAR, _TOLD = 1.1, 1.25
_OUTER, _INNER, _NEARER = 20, 60, 8
# Steps beyond a schedule that leaves a grid above the target.
_MORE = 2
# A step must bring this part of the fall it aims at.
_ENOUGH = 0.25
_PASSES, _SETTLED = 8, 0.05
# In stated errors, which may be too small; of normal residuals it is 0.67.
_FITTED = 3.0
# Of a logarithm, a factor of seven: what is farther from a linearisation is nonsense.
_FARTHEST = 2.0
# Two falls in a row by less than this share of the misfit fit what is no ground.
_SLOW = 0.03
# Steps home at most; and an answer so far from the model, in the unknown, has no misfit.
_HOMING, _BEYOND = 6, 10.0
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
    reason : str
        How the loop ended, in words.
    """

    measurement: Measurement
    field: Array
    steps: OuterSteps
    weights: Array
    reason: str


def linearise(
    measurement: NonlinearMeasurement,
    grid: Grid,
    method: Method,
    *,
    targets: Sequence[float] | None = None,
    homing: int | None = None,
    weights: Array | None = None,
    outliers: Outliers = "off",
) -> Generator[Progress, None, Linearised]:
    """Fits a nonlinear measurement by linear ones in standard form, until chi-square is 1.

    Gauss-Newton with increments: each linearisation is solved from the model it is made at, by CGLS that
    ends where the linear misfit meets the step's target exactly; the target comes nearer until the
    nonlinear misfit follows. One last linearisation, centred on the prior mean, is left for the rules.
    Where the answer by that would not fit, steps part of the way towards it bring the model home: to where
    the linear answer is the model it is made at. Only the prior's covariance is taken from ``method``, its
    mean from the measurement.

    Parameters
    ----------
    measurement : NonlinearMeasurement
    grid : Grid
    method : Method
    targets : sequence of float, optional
        Chi-squares to aim at, a step each, and two more at 1 where they do not lead there: the rungs of a
        ladder are comparable when all make the same steps. Default: each step aims at a quarter of
        chi-square, down to 1.
    homing : int, optional
        How many steps home to try; default: as many as the answer needs to fit.
    weights : array, shape (n_data,), optional
        Of the data, kept throughout.
    outliers : "auto", "tukey" or "off"
        Without ``weights``: Huber's weights at each step to begin with, then Tukey's biweight until it
        rests; with "auto" only when most data are fitted and at least two residuals are wild, else all
        weights are 1.

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
            # Where not even half of the data are fitted, what stands out of the others tells nothing.
            fitted = float(np.median(np.abs(residual))) < _FITTED
            if outliers == "tukey" or (fitted and some_wild(residual)):
                weights = biweight(residual)
                for _ in range(_PASSES):
                    _, residual = yield from _steps(measurement, grid, method, None, weights)
                    before, weights = weights, biweight(residual)
                    if float(np.abs(weights - before).max()) < _SETTLED:
                        break
    found, _ = yield from _steps(measurement, grid, method, targets, weights)
    return (yield from _brought_home(measurement, grid, method, found, homing))


def linearised_at(measurement: NonlinearMeasurement, field: Array) -> tuple[Measurement, Array]:
    """The linear measurement that touches a nonlinear one at a field, and the data over that field."""
    predicted, operator = measurement.linearise(field)
    linear = Measurement(
        operator,
        measurement.data - predicted + operator.matvec(field),
        measurement.errors,
        measurement.groupings,
        measurement.extras,
        measurement.start,
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
    constants = np.zeros_like(data)
    linear, predicted = linearised_at(measurement, field)
    bounds = method.bounds or (-np.inf, np.inf)
    root: LinearOperator | None = None
    aims: list[float] = []
    misfits: list[float] = []
    inner: list[Array] = []
    slow, ended = 0, ""
    while True:
        residual = data - predicted - constants
        weighed = huber(residual / errors) if weights is None else weights
        energy = HUBER_ENERGY if weights is None else BIWEIGHT_ENERGY
        allowed = weighted_errors(errors, weighed, energy)
        fitted = replace(linear, data=linear.data - constants, errors=allowed)
        chi_square = _mean_square(residual / fitted.errors)
        misfits.append(chi_square)
        made = len(aims)
        yield Progress("", made, len(targets or ()) or _OUTER, f"misfit {chi_square:.3g}")
        scheduled = _OUTER if targets is None else len(targets) + (_MORE if chi_square > _TOLD else 0)
        if ended or made >= scheduled:
            break
        if targets is None and chi_square <= (_NEAR if made else 1.0):
            break
        aim = max(_FALL * chi_square, 1.0) if targets is None else (*targets, *(1.0,) * _MORE)[made]
        if root is None:
            root, _ = prior(fitted, grid, method)
        standard = standard_form(fitted, root, field)
        for _ in range(_NEARER):
            solution, curve = _iterate_at(standard, aim)
            step = standard.ground(solution) - field
            part = min(1.0, _FARTHEST / max(float(np.abs(step).max()), _FARTHEST))
            there = np.clip(field + part * step, *bounds)
            added = part * beside(measurement, standard.extras(solution))
            touching = linearised_at(measurement, there)
            after = _mean_square((data - touching[1] - constants - added) / fitted.errors)
            if after <= max(chi_square - _ENOUGH * (chi_square - aim), _NEAR * aim):
                break
            # A step that aims too far bends its own rays away: one that aims at less has another direction.
            aim = float(np.sqrt(aim * chi_square))
        else:
            ended = "no step lowers it by much"
            break
        moved = grid.norm(there - field)
        (linear, predicted), field, constants = touching, there, constants + added
        aims.append(aim)
        inner.append(curve)
        slow = slow + 1 if after > (1 - _SLOW) * chi_square else 0
        if targets is None and (slow > 1 or moved < _STILL * grid.norm(field - measurement.start)):
            ended = "further steps hardly lower it"
    made = len(aims)
    reached, in_words = misfits[-1] <= _TOLD, counted(made, "outer step", "outer steps")
    reason = f"the misfit comes to {misfits[-1]:.3g} in {in_words}"
    if not reached:
        reason = (
            f"the misfit stays at {misfits[-1]:.3g} after {in_words}, its target is 1"
            f"{': ' + ended if ended else ''}"
        )
    steps = OuterSteps(tuple(misfits), tuple(aims), tuple(inner), reached)
    return Linearised(linear, field, steps, weighed, reason), residual / errors


def _brought_home(
    measurement: NonlinearMeasurement, grid: Grid, method: Method, found: Linearised, count: int | None
) -> Generator[Progress, None, Linearised]:
    """Steps from the model towards the answer from the prior mean, by ever smaller parts of the way.

    Until the answer's own misfit is that of the outer steps, within a quarter, or ``count`` of them; of all
    these models it is the one whose answer fits best.
    """
    errors = weighted_errors(measurement.errors, found.weights)
    bounds = method.bounds or (-np.inf, np.inf)
    root, _ = prior(replace(found.measurement, errors=errors), grid, method)
    aim = max(found.steps.misfits[-1], 1.0)
    most = _HOMING if count is None else count
    nearest, owns = found, list[float]()
    for made in range(most + 1):
        standard = standard_form(replace(found.measurement, errors=errors), root, measurement.start)
        solution, _ = _iterate_at(standard, aim)
        way = np.clip(standard.ground(solution), *bounds) - found.field
        far = float(np.abs(way).max())
        own = np.inf
        if far < _BEYOND:
            predicted = measurement.predict(found.field + way)
            predicted = predicted + beside(measurement, standard.extras(solution))
            own = _mean_square((measurement.data - predicted) / errors)
        owns.append(own)
        yield Progress("", made, most, f"misfit of the answer {own:.3g}")
        found = replace(found, steps=replace(found.steps, homing=tuple(owns)))
        if own == min(owns):
            nearest = found
        if made == most or (count is None and own <= _TOLD * aim):
            break
        part = min(1 / max(made + 1, 2), _FARTHEST / max(far, _FARTHEST))
        field = found.field + part * way
        found = replace(found, field=field, measurement=linearised_at(measurement, field)[0])
    return nearest


def _iterate_at(standard: StandardForm, target: float) -> tuple[Array, Array]:
    """The CGLS iterate, shape (n_unknowns,), between steps, whose mean squared residual is the target.

    Also the mean squares of its residual at the iterations up to there.
    """
    aim = target * standard.b.size
    x, r = np.zeros(standard.operator.shape[1]), standard.b
    curve = [_mean_square(r)]
    if curve[0] <= target:
        return x, np.array(curve)
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
