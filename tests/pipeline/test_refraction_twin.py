"""The nonlinear chain over grids, on data that march through a described ground on a finer grid than any."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from pylops import MatrixMult
from tests.products.made_up_results import make_outer_steps, make_result
from tests.refraction_twin import CONFIG, twin

from stillground.config import load
from stillground.pipeline.remarks import remark_nonlinear
from stillground.protocols import Measurement, Word
from stillground.reconstruct import Linearised

COARSE = ("ground.spacing=0.5 m", "refinement.levels=2")


def test_a_twin_settles_near_the_truth_and_a_white_prior_does_not() -> None:
    clean = twin()
    top, grid = clean.top, clean.top.finest.grid
    outer = clean.linear.outer[grid]
    assert outer.steps.reached
    assert len(outer.steps.targets) <= 8
    # Sharp layers through a smooth prior: what is left is mostly their edges.
    assert clean.error(top.model, clean.lit) < 0.75 * clean.error(clean.measurement.start, clean.lit)
    assert top.ladder.verdict.word == "settled"
    assert top.ladder.change[1] < 0.02
    assert top.ladder.change[0] > 2 * top.ladder.change[1]

    moved = clean.linear.moved(grid)
    assert moved is not None
    assert 0 < moved < 0.02
    assert clean.linear.moved(clean.linear.grids[0]) is None

    # On white ground the answer has no limit: doubling the nodes goes on changing it.
    white = twin("ground.smoothness=0").top.ladder
    assert white.verdict.word == "drifting"
    assert white.change[1] > 0.8 * white.change[0]


@pytest.mark.parametrize(("word", "share", "told"), [("drifting", 0.5, True), ("drifting", 0.9, False),
                                                     ("settled", 0.5, False)])  # fmt: skip
def test_a_linearisation_that_moves_more_than_the_steps_is_told(word: Word, share: float, told: bool) -> None:
    config, _ = load(CONFIG)
    result = make_result()
    outer = Linearised(
        measurement=Measurement(MatrixMult(np.eye(1)), np.ones(1), np.ones(1)),
        field=np.ones(1),
        steps=make_outer_steps(),
        weights=np.ones(1),
        reason="",
    )
    ladder = replace(result.ladder, verdict=replace(result.ladder.verdict, word=word))
    said = remark_nonlinear(outer, (), result.chosen, ladder, share * ladder.change[-1], config)
    assert ("two ways" in " ".join(said)) is told


def test_a_tenth_of_wild_picks_costs_the_ground_at_most_a_twentieth() -> None:
    clean, robust = twin(*COARSE), twin(*COARSE, wild=0.1)
    assert np.all(clean.linear.weights == 1)
    assert 0.09 < np.mean(robust.linear.weights < 0.5) < 0.13
    error = clean.error(clean.top.model, clean.lit)
    assert robust.error(robust.top.model, clean.lit) < 1.05 * error

    # Least squares would have followed them.
    plain = twin(*COARSE, "errors.outliers=off", wild=0.1)
    assert plain.error(plain.top.model, clean.lit) > 1.3 * error
