"""What a nonlinear measurement itself says of the answer that its last linearisation gave."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from stillground.config import Config
from stillground.errors import ConfigError
from stillground.pipeline.linear import Linear
from stillground.pipeline.logarithm import BEYOND
from stillground.pipeline.profiles import Profile
from stillground.pipeline.remarks import remark_nonlinear
from stillground.pipeline.unreached import why_unreached
from stillground.protocols import NonlinearMeasurement, Result
from stillground.reconstruct import Reconstruction, weighted_errors


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
    predicted = measurement.predict(model)
    for extra in measurement.extras:
        predicted = predicted + extra.response @ result.extras[extra.name].values
    left = (result.observed - predicted) / weighted_errors(result.errors, result.weights)
    chosen = replace(result.chosen, chi_square_recomputed=float(left @ left) / left.size)
    rays = measurement.rays(model)
    causes, moved = why_unreached(linear, finest, profile), linear.moved(finest.grid)
    said = remark_nonlinear(outer, causes, chosen, result.ladder, moved, config)
    return replace(
        result,
        predicted=predicted,
        choices=tuple(chosen if choice is result.chosen else choice for choice in result.choices),
        chosen=chosen,
        rays=rays,
        coverage=profile.scene.coverage(finest.grid, finest.method.correlation, rays),
        outer_steps=outer.steps,
        remarks=result.remarks + said,
    )
