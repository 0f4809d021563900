"""The nonlinear chain over grids, on data that march through a described ground on a finer grid than any."""

from __future__ import annotations

import numpy as np
from tests.refraction_twin import twin

COARSE = ("ground.spacing=0.5 m", "refinement.levels=2")


def test_a_twin_settles_near_the_truth_and_a_white_prior_does_not() -> None:
    clean = twin()
    top, grid = clean.top, clean.top.finest.grid
    outer = clean.linear.outer[grid]
    assert outer.reached
    assert len(outer.steps.targets) <= 8
    # Sharp layers through a smooth prior: what is left is mostly their edges.
    assert clean.error(top.model, clean.lit) < 0.75 * clean.error(clean.measurement.start, clean.lit)
    assert top.ladder.verdict.word == "settled"
    assert top.ladder.change[1] < 0.02
    assert top.ladder.change[0] > 2 * top.ladder.change[1]

    # On white ground the answer has no limit: doubling the nodes goes on changing it.
    white = twin("ground.smoothness=0").top.ladder
    assert white.verdict.word == "drifting"
    assert white.change[1] > 0.8 * white.change[0]


def test_a_tenth_of_wild_picks_costs_the_ground_at_most_a_twentieth() -> None:
    clean, robust = twin(*COARSE), twin(*COARSE, wild=0.1)
    assert np.all(clean.linear.weights == 1)
    assert 0.09 < np.mean(robust.linear.weights < 0.5) < 0.13
    error = clean.error(clean.top.model, clean.lit)
    assert robust.error(robust.top.model, clean.lit) < 1.05 * error

    # Least squares would have followed them.
    plain = twin(*COARSE, "errors.outliers=off", wild=0.1)
    assert plain.error(plain.top.model, clean.lit) > 1.3 * error
