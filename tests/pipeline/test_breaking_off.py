"""What is done when the user breaks off stays; what is not done is missing and told."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from tests.broken_off import broken_at

from stillground.config import from_mapping, load
from stillground.errors import ConfigError
from stillground.pipeline.answer import answer
from stillground.pipeline.grids import plan_grids
from stillground.pipeline.profiles import read_profiles
from stillground.progress import finish, staged
from stillground.protocols import Progress


def test_an_answer_stands_when_its_error_bars_are_broken_off(small: Path) -> None:
    result = broken_at(small / "small.toml", "noise part", done=5)
    assert result.interrupted
    assert np.isnan(result.noise_part).all(), "no error bars rather than too small ones"
    assert len(result.ladder.rungs) == 3
    assert "interrupted after the ladder" in result.remarks[0]


def test_a_ladder_stands_when_its_check_of_rounding_is_broken_off(small: Path) -> None:
    result = broken_at(
        small / "small.toml", "rounding", "stopping.choose=discrepancy", "stopping.tau=0.1", done=5
    )
    assert result.interrupted
    assert (len(result.ladder.rungs), result.ladder.jitter) == (3, None)
    assert "interrupted after the ladder" in result.remarks[0]


def test_a_rung_is_judged_as_far_as_it_came(small: Path) -> None:
    result = broken_at(small / "small.toml", "rung 2", done=5)
    assert result.interrupted
    assert len(result.ladder.rungs) == 2
    assert result.history.last == 5
    assert "interrupted on the grid of 0.5 m after 5 iterations" in result.remarks[0]


def test_what_is_thrown_into_staged_work_reaches_it() -> None:
    seen = []

    def work():  # type: ignore[no-untyped-def]
        try:
            yield Progress("own", 0, 1)
        except KeyboardInterrupt:
            seen.append("caught")
            yield Progress("own", 1, 1)
        return 7

    outer = staged(work(), "stage")
    assert next(outer).stage == "stage"
    assert outer.throw(KeyboardInterrupt).done == 1
    assert seen == ["caught"]
    assert finish(outer) == 7


def test_a_chosen_rule_that_does_not_apply_spoils_no_rehearsal(small: Path) -> None:
    config, _ = load(
        small / "small.toml",
        ["solver.method=kaczmarz", "stopping.choose=hanke-raus", "rehearsal.twins=2", "solver.iterations=6"],
    )
    (profile,) = read_profiles(config)
    result = finish(answer(profile, plan_grids(profile, config), config))
    assert result.rehearsal is not None
    assert "hanke-raus" not in result.rehearsal.cost


@pytest.mark.parametrize(
    ("tables", "told"),
    [
        ({"rehearsal": {"twins": 1}}, "twins = 1 tells nothing"),
        ({"rehearsal": {"twins": 5}, "refinement": {"levels": 1}}, "data from a finer grid; take 2 or more"),
        (
            {
                "solver": {"method": "kaczmarz"},
                "ground": {
                    "spacing": "1 m", "correlation": "2 m",
                    "bounds": ["1500 m/s", "1800 m/s"], "background": "2000 m/s",
                },
            },
            "ground.background lies outside ground.bounds",
        ),
    ],
)  # fmt: skip
def test_settings_that_contradict_each_other_are_refused(tables: dict[str, object], told: str) -> None:
    data = {
        "title": "t",
        "survey": {"kind": "straight-ray", "files": ["a.csv"]},
        "ground": {"spacing": "1 m", "correlation": "2 m"},
    }
    with pytest.raises(ConfigError, match=told):
        from_mapping(data | tables)
