"""What a nonlinear measurement itself says of the answer that its last linearisation gave."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np

from stillground.config import Config
from stillground.errors import ConfigError
from stillground.grid import Grid
from stillground.pipeline.linear import Linear
from stillground.pipeline.logarithm import BEYOND
from stillground.pipeline.profiles import Profile
from stillground.pipeline.remarks import remark_nonlinear
from stillground.pipeline.unreached import why_unreached
from stillground.protocols import Array, Choice, Ladder, NonlinearMeasurement, Result
from stillground.reconstruct import Reconstruction, beside, weighted_errors

# An answer with that many times the misfit it should have does not fit.
_POOR = 1.5
# This share of the rays along the base is no chance.
_SOME = 0.02


def recomputed(
    result: Result,
    measurement: NonlinearMeasurement,
    linear: Linear,
    finest: Reconstruction,
    profile: Profile,
    config: Config,
) -> Result:
    """A result with the data, the misfit, the rays and the coverage of its answer by the measurement itself.

    Raises
    ------
    ConfigError
        When the answer is so far from the prior mean that nothing can be computed through it.
    """
    model, outer = result.model.reshape(-1), linear.outer[finest.grid]
    if config.kind.logarithmic and np.abs(model - measurement.start).max() > BEYOND:
        raise ConfigError(
            f"{profile.name}: to fit the data the ground would have to change by a factor of more than "
            f"{np.exp(BEYOND):.0g}; look at errors.floor, which may be too small, at the picks "
            f'(errors.outliers = "tukey" leaves wild ones out), and at the velocity or other ground that '
            f"the fit starts from"
        )
    extras = {name: found.values for name, found in result.extras.items()}
    predicted = measurement.predict(model) + beside(measurement, extras)
    left = (result.observed - predicted) / weighted_errors(result.errors, result.weights)
    chosen = replace(result.chosen, chi_square_recomputed=float(left @ left) / left.size)
    rays = measurement.rays(model)
    causes, moved = why_unreached(linear, finest, profile), linear.moved(finest.grid)
    ladder = _doubted(result.ladder, chosen, trust=config.errors.trust)
    said = _along_the_base(rays, finest.grid, profile)
    if result.extras:
        said += (
            f"{', '.join(result.extras)}: the start of the fit, from the same data, takes up a part; what is "
            f"found depends on where the fit starts, and has no error bar",
        )
    said += remark_nonlinear(outer, causes, chosen, result.ladder, moved, config)
    return replace(
        result,
        predicted=predicted,
        ladder=ladder,
        choices=tuple(chosen if choice is result.chosen else choice for choice in result.choices),
        chosen=chosen,
        rays=rays,
        coverage=profile.scene.coverage(finest.grid, finest.method.correlation, rays),
        outer_steps=outer.steps,
        remarks=result.remarks + said,
    )


def _doubted(ladder: Ladder, chosen: Choice, *, trust: bool) -> Ladder:
    """A ladder whose answer does not fit the data is not settled, however little it moves.

    It is to fit the errors stated where these are trusted, else as well as its linearisation does.
    """
    own, verdict = chosen.chi_square_recomputed or 0.0, ladder.verdict
    if verdict.word != "settled" or own <= _POOR * (1.0 if trust else max(chosen.chi_square, 1.0)):
        return ladder
    reason = (
        f"the answer itself has a misfit of {own:.3g}, its linearisation {chosen.chi_square:.3g}: it is not "
        f"the ground that the data ask for, though it hardly moves from grid to grid"
    )
    return replace(ladder, verdict=replace(verdict, word="undecided", reason=reason))


def _along_the_base(rays: Sequence[Array], grid: Grid, profile: Profile) -> tuple[str, ...]:
    """Whether the ground that is modelled ends where rays would go deeper."""
    base = grid.origin[-1] + 1.5 * grid.spacing[-1]
    below = sum(bool(len(ray)) and float(ray[:, -1].min()) < base for ray in rays)
    deepest = min(float(places[:, -1].min()) for places in profile.scene.positions.values())
    if not rays or below < _SOME * len(rays) or deepest < base:
        return ()
    return (
        f"{below} of {len(rays)} rays run along the base of the ground that is modelled, at "
        f"{grid.origin[-1]:.4g} m: they would go deeper; take a larger ground.depth",
    )
