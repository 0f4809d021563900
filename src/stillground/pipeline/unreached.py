"""Why a nonlinear measurement was not fitted to its errors: what the data and the grids say of the causes."""

from __future__ import annotations

from collections.abc import Generator, Sequence

import numpy as np

from stillground.counted import counted
from stillground.grid import Grid
from stillground.percent import percent
from stillground.pipeline.linear import Linear
from stillground.pipeline.profiles import Profile
from stillground.progress import staged
from stillground.protocols import Array, ErrorEstimate, NonlinearMeasurement, Progress
from stillground.reconstruct import Linearised, Method, Reconstruction, biweight, linearise
from stillground.survey import row_numbers

# What takes a cause's part of the misfit away must leave less than this of it.
_CLEARLY = 0.75
# Errors by pairs that many times those stated leave a misfit above what counts as reached.
_LARGER = 1.25
_LISTED = 5


def why_unreached(
    linear: Linear,
    grids: Sequence[Grid],
    first: int,
    finest: Reconstruction,
    profile: Profile,
    method: Method,
) -> Generator[Progress, None, tuple[str, ...]]:
    """Sentences on the causes, one each; nothing where the target is reached or the measurement linear.

    Too small errors are told by data that measure one thing more than once, outliers by the residuals, and a
    grid too coarse by the next finer one than the ``first``, where the whole fit is tried again.

    Yields
    ------
    Progress
    """
    outer = linear.outer.get(finest.grid)
    if outer is None or outer.reached:
        return ()
    misfit = outer.chi_squares[-1]
    finer = None
    if first + 1 < len(grids):
        measurement = linear.measured(grids[first + 1])
        assert isinstance(measurement, NonlinearMeasurement)
        work = linearise(measurement, grids[first + 1], method, weights=linear.weights)
        finer = yield from staged(work, "whether a finer grid fits better")
    found = [
        *_errors(profile.scene.error_estimate, misfit),
        *_constants(profile.scene.error_estimate, finest),
        *_outliers(finest, linear.weights, misfit, profile),
        *_grid(linear.outer[grids[first]], finer, grids[first:], finest.grid),
    ]
    return tuple(found) or (_none_found(profile.scene.error_estimate, misfit, finer),)


def _errors(estimate: ErrorEstimate | None, misfit: float) -> list[str]:
    if estimate is None or estimate.ratio < _LARGER:
        return []
    alone = min(estimate.ratio**2, misfit)
    return [
        f"the errors stated are too small: {estimate.said}; that alone makes {alone:.3g} of the misfit of "
        f"{misfit:.3g}; state errors {estimate.ratio:.2g} times as large"
    ]


def _constants(estimate: ErrorEstimate | None, finest: Reconstruction) -> list[str]:
    if estimate is None or not estimate.constants or finest.measurement.extras:
        return []
    return [f"sources or receivers have constants of their own: {estimate.said}; set errors.statics"]


def _outliers(finest: Reconstruction, weights: Array, misfit: float, profile: Profile) -> list[str]:
    """Residuals are those of the linearisation where it fits as well as the outer steps did."""
    curve = finest.run.history.chi_square
    residual = finest.run.residual(float(np.argmax(curve <= max(misfit, curve.min()))))
    wild = biweight(residual) == 0
    energy = residual**2
    if not wild.any() or energy[~wild].mean() > _CLEARLY * energy.mean():
        return []
    worst = np.flatnonzero(wild)[np.argsort(-energy[wild])]
    rows = row_numbers(profile.survey)
    listed = ", ".join(f"row {rows[i]} ({residual[i]:+.2g} errors)" for i in worst[:_LISTED])
    more = f" and {worst.size - _LISTED} more" if worst.size > _LISTED else ""
    share = percent(float(energy[wild].sum() / energy.sum()))
    remedy = ', or set errors.outliers = "tukey"' if np.all(weights == 1) else ""
    return [
        f"{counted(worst.size, 'datum lies', 'data lie')} far off all others: {listed}{more}; they make "
        f"{share} of the misfit, which is {energy[~wild].mean():.3g} without; look at these picks and "
        f"set use to 0{remedy}"
    ]


def _grid(coarse: Linearised, finer: Linearised | None, grids: Sequence[Grid], finest: Grid) -> list[str]:
    if finer is None or finer.chi_squares[-1] > _CLEARLY * coarse.chi_squares[-1]:
        return []
    wide, narrow = (max(grid.spacing) for grid in grids[:2])
    return [
        f"the grid is too coarse for the data: on nodes of {wide:g} m the misfit stays at "
        f"{coarse.chi_squares[-1]:.3g}, on {narrow:g} m it comes to {finer.chi_squares[-1]:.3g}; take "
        f"ground.spacing of {max(finest.spacing) / 2:g} m or less"
    ]


def _none_found(estimate: ErrorEstimate | None, misfit: float, finer: Linearised | None) -> str:
    tried = [
        "no data measure one thing twice, so that the errors stated may be too small"
        if estimate is None
        else f"the errors stated are right ({estimate.said})",
        "no datum lies far off all others",
    ]
    if finer is not None:
        tried.append(f"a finer grid fits no better ({finer.chi_squares[-1]:.3g})")
    return (
        f"of the usual causes of a misfit of {misfit:.3g} none is found: {', '.join(tried)}; left are "
        f"constants of sources or receivers (errors.statics), a start too far off, and ground that "
        f"changes over less than ground.correlation"
    )
