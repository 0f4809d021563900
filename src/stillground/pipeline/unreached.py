"""Why a nonlinear measurement was not fitted to its errors: what the data and the grids say of the causes."""

from __future__ import annotations

import numpy as np

from stillground.counted import counted
from stillground.grid import Grid
from stillground.percent import percent
from stillground.pipeline.linear import Linear
from stillground.pipeline.profiles import Profile
from stillground.protocols import Array, ErrorEstimate
from stillground.reconstruct import Reconstruction, biweight
from stillground.survey import row_numbers

# What takes a cause's part of the misfit away must leave less than this of it.
_CLEARLY = 0.75
# A finer grid makes two steps more: by themselves they take a third of a misfit that errors too small leave.
_FINER = 0.5
# Errors by pairs that many times those stated leave a misfit above what counts as reached.
_LARGER = 1.25
_LISTED = 5


def why_unreached(linear: Linear, finest: Reconstruction, profile: Profile) -> tuple[str, ...]:
    """Sentences on the causes, one each; nothing where the target is reached.

    Too small errors are told by data that measure one thing more than once, outliers by the residuals, and a
    grid too coarse, where it is nothing of these, by the rung before.
    """
    if linear.outer[finest.grid].steps.reached:
        return ()
    rungs = linear.grids[: linear.grids.index(finest.grid) + 1]
    *coarser, misfit = (linear.outer[grid].steps.misfits[-1] for grid in rungs)
    before = coarser[-1] if coarser else None
    estimate = profile.scene.error_estimate
    found = (
        *_errors(estimate, misfit),
        *_constants(estimate, finest),
        *_outliers(finest, linear.weights, misfit, profile),
    ) or tuple(_grid(before, misfit, finest.grid))
    return found or (_none_found(estimate, before, misfit),)


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


def _grid(before: float | None, misfit: float, grid: Grid) -> list[str]:
    if before is None or misfit > _FINER * before:
        return []
    spacing = max(grid.spacing)
    return [
        f"the grid is too coarse for the data: on nodes of {2 * spacing:g} m the misfit is {before:.3g} "
        f"and on {spacing:g} m {misfit:.3g}; take ground.spacing of {spacing / 2:g} m or less"
    ]


def _none_found(estimate: ErrorEstimate | None, before: float | None, misfit: float) -> str:
    tried = [
        "no data measure one thing twice, so that the errors stated may be too small"
        if estimate is None
        else f"the errors stated are right ({estimate.said})",
        "no datum lies far off all others",
        *([] if before is None else [f"the grid before does not fit clearly worse ({before:.3g})"]),
    ]
    return (
        f"of the usual causes of a misfit of {misfit:.3g} none is found: {', '.join(tried)}; left are "
        "constants of sources or receivers (errors.statics), a start too far off, and ground that changes "
        "over less than ground.correlation"
    )
