"""Between a ground property and its logarithm, where a kind of measurement seeks that."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace

import numpy as np

from stillground.config import Config
from stillground.grid import Grid
from stillground.protocols import Array, Average, Result

# No ground differs so much from its prior mean, and marches and products end in overflow.
BEYOND = 20.0


def in_unknown(value: float | None, config: Config) -> float | None:
    """A ground property as what is reconstructed: of a logarithmic kind its logarithm."""
    return float(np.log(value)) if value is not None and config.kind.logarithmic else value


def out_of_the_logarithm(result: Result, grid: Grid, averages: Mapping[str, Array]) -> Result:
    """A result in the logarithm of the ground property as one in the property itself.

    Errors and changes are taken to first order, property times error of the logarithm. What is relative, as
    the changes of the ladder and with them its verdict, stays that of the logarithm. Iterates farther from
    the prior mean than any ground are cut there.
    """
    least, most = float(result.background.min()) - BEYOND, float(result.background.max()) + BEYOND

    def out(field: Array) -> Array:
        return np.exp(np.clip(field, least, most))

    model = out(result.model)

    def scaled(errors: Array) -> Array:
        return model * errors

    def average(name: str, mean: Average) -> Average:
        value = float(averages[name] @ model.reshape(-1))
        total = None if mean.total_error is None else value * mean.total_error
        return Average(value, value * mean.noise_part, total)

    choices = tuple(replace(choice, model=out(choice.model)) for choice in result.choices)
    spread = grid.norm(model - grid.mean(model)) / float(np.sqrt(np.prod(grid.lengths)))
    rehearsal, sensitivity = result.rehearsal, result.sensitivity
    means = {name: average(name, mean) for name, mean in result.averages.items()}
    if rehearsal is not None:
        missed = {name: means[name].value * error for name, error in rehearsal.average_errors.items()}
        rehearsal = replace(rehearsal, total_error=scaled(rehearsal.total_error), average_errors=missed)
    return replace(
        result,
        background=out(result.background),
        model=model,
        mesh_change=scaled(result.mesh_change),
        anomaly=spread if result.anomaly > 0 else 0.0,
        choices=choices,
        chosen=next(choice for choice in choices if choice.rule == result.chosen.rule),
        snapshots=tuple((iteration, out(field)) for iteration, field in result.snapshots),
        ladder=replace(
            result.ladder,
            rungs=tuple(replace(rung, model=out(rung.model)) for rung in result.ladder.rungs),
        ),
        noise_part=scaled(result.noise_part),
        rehearsal=rehearsal,
        sensitivity=sensitivity and replace(sensitivity, spread=scaled(sensitivity.spread)),
        averages=means,
    )
