"""The table of the fit and the summary, in the words and units that users rely on."""

from __future__ import annotations

import json
import math
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest

from stillground.errors import OutputError
from stillground.products.fit import fit_table, write_fit
from stillground.products.summary import profile_summary, run_summary, write_summary
from stillground.protocols import Result

from .made_up_results import fit_places, positions


@pytest.fixture
def summary(result: Result) -> dict[str, Any]:
    return profile_summary("crosshole-ab", result, {"section": "crosshole-ab_section.nc"})


def test_the_fit_is_in_the_tables_unit(result: Result, tmp_path: Path) -> None:
    made = fit_table(result, rows=np.arange(2, 627), datum="time", unit="ms", si_factor=1e-3, **fit_places())
    path = write_fit(tmp_path, "crosshole-ab", made)
    assert path.name == "crosshole-ab_fit.csv"
    assert path.read_bytes().startswith(
        b"row,observed_time [ms],predicted_time [ms],residual_over_error,weight,"
        b"source,source_distance [m],source_elevation [m],"
        b"receiver,receiver_distance [m],receiver_elevation [m]\n2,"
    )
    read = pd.read_csv(path)
    np.testing.assert_allclose(read["observed_time [ms]"], 1e3 * result.observed, rtol=1e-8)
    np.testing.assert_allclose(read["predicted_time [ms]"], 1e3 * result.predicted, rtol=1e-8)
    # Errors are 0.1 ms throughout.
    difference = read["observed_time [ms]"] - read["predicted_time [ms]"]
    np.testing.assert_allclose(read["residual_over_error"], difference / 0.1, atol=1e-5)
    assert np.flatnonzero(read["weight"] < 1).tolist() == [17, 300]
    assert read["weight"].min() == 0.25
    assert read["row"].tolist() == list(range(2, 627))


def test_the_fit_names_groups_and_their_places(result: Result) -> None:
    made = fit_table(result, rows=np.arange(625), datum="time", unit="s", si_factor=1, **fit_places())
    sources, receivers = positions()
    assert (made["source"].min(), made["source"].max()) == (1, 25)
    for name, places in (("source", sources), ("receiver", receivers)):
        stands = made[[f"{name}_distance [m]", f"{name}_elevation [m]"]].to_numpy()
        np.testing.assert_array_equal(stands, places[result.groupings[name]])
    bare = fit_table(
        result, rows=np.arange(625), datum="time", unit="s", si_factor=1, axes=("elevation",), positions={}
    )
    assert list(bare.columns[-2:]) == ["source", "receiver"]


def test_a_fit_that_cannot_be_written_is_named(result: Result, tmp_path: Path) -> None:
    (tmp_path / "results").write_text("")
    made = fit_table(result, rows=np.arange(625), datum="time", unit="s", si_factor=1, **fit_places())
    with pytest.raises(OutputError, match=r"crosshole-ab_fit\.csv"):
        write_fit(tmp_path / "results", "crosshole-ab", made)


def test_the_summary_has_the_agreed_keys(summary: dict[str, Any], result: Result, tmp_path: Path) -> None:
    # The contract with outside programs: every key, and no other.
    made = run_summary("Osmere Weir", "0.1.0", 3.2, [summary])
    read = json.loads(write_summary(tmp_path, made).read_text(encoding="utf-8"))
    assert list(read) == ["schema", "title", "version", "verdict", "seconds", "profiles", "files"]
    assert (read["schema"], read["verdict"], read["seconds"]) == (1, "settled", 3.2)
    profile = read["profiles"][0]
    assert list(profile) == [
        "name",
        "data",
        "nodes",
        "chosen",
        "rules",
        "refinement",
        "averages",
        "noise",
        "outer_steps",
        "start_dependence",
        "remarks",
        "extras",
        "rehearsal",
        "sensitivity",
        "files",
    ]
    assert (profile["data"], profile["nodes"]) == (625, 89 * 121)
    assert list(profile["chosen"]) == ["rule", "iteration", "chi_square", "chi_square_recomputed"]
    assert profile["chosen"]["iteration"] == 9
    assert profile["outer_steps"] is None
    assert list(profile["rules"][0]) == [
        "rule",
        "iteration",
        "chi_square",
        "firm",
        "roughness",
        "distance",
        "reason",
    ]
    assert [rule["rule"] for rule in profile["rules"]] == [choice.rule for choice in result.choices]
    assert profile["rules"][0]["iteration"] == 13.4
    refinement = profile["refinement"]
    assert list(refinement) == [
        "verdict",
        "reason",
        "order",
        "expected",
        "change",
        "remaining",
        "pick_drift",
        "jitter",
        "index",
        "index_order",
        "index_reason",
        "notes",
        "levels",
    ]
    assert [refinement[name] for name in ("expected", "index", "index_order", "index_reason")] == [
        2.0,
        0.0009,
        1.9,
        None,
    ]
    assert refinement["levels"][0] == {"spacing": 2.0, "nodes": 192, "iteration": 9}
    assert profile["files"] == {"section": "crosshole-ab_section.nc"}


def test_the_summary_tells_noise_remarks_and_extra_unknowns(
    summary: dict[str, Any], result: Result, tmp_path: Path
) -> None:
    made = write_summary(tmp_path, run_summary("t", "0", None, [summary]))
    profile = json.loads(made.read_text(encoding="utf-8"))["profiles"][0]
    assert profile["noise"] == 1.07
    assert profile["remarks"] == ["2 of 625 data look like outliers"]
    statics = result.extras["source_static"].values
    assert list(profile["extras"]) == ["source_static", "delay"]
    assert profile["extras"]["delay"] == {"units": "s", "values": [3e-4], "deviation": 2e-4}
    assert profile["extras"]["source_static"] == {
        "units": "s",
        "rms": pytest.approx(math.sqrt(sum(x * x for x in statics) / 25), rel=1e-5),
        "largest": pytest.approx(1e-4 * abs(math.sin(11)), rel=1e-5),
    }


def test_the_summary_tells_what_each_rule_costs(
    summary: dict[str, Any], result: Result, tmp_path: Path
) -> None:
    made = write_summary(tmp_path, run_summary("t", "0", None, [summary]))
    profile = json.loads(made.read_text(encoding="utf-8"))["profiles"][0]
    rehearsal = profile["rehearsal"]
    assert list(rehearsal) == ["groups", "cost", "left_out", "remarks", "families"]
    assert rehearsal["groups"][0] == ["gcv", "discrepancy", "risk", "whiteness", "monotone-error"]
    assert rehearsal["groups"][1:] == [["quasi-optimality"], ["l-curve"], ["hanke-raus"]]
    assert rehearsal["cost"]["l-curve"] == 0.6
    assert result.rehearsal is not None
    ratios = sorted(result.rehearsal.ratios["layers"]["l-curve"])
    # Of twenty values, linear between the ordered ones (Hyndman & Fan 1996, type 7; from memory).
    assert rehearsal["families"]["layers"]["l-curve"] == {
        "median": pytest.approx((ratios[9] + ratios[10]) / 2, rel=1e-5),
        "p90": pytest.approx(0.9 * ratios[17] + 0.1 * ratios[18], rel=1e-5),
        "worst": pytest.approx(ratios[19], rel=1e-5),
    }
    assert profile["sensitivity"][0] == {"name": "lengths halved", "iteration": 7.3, "distance": 0.39}
    assert profile["sensitivity"][2]["iteration"] == 11


def test_what_was_not_asked_for_is_null(make: Callable[..., Result]) -> None:
    made = profile_summary("ab", make(argued=False, spacing=1.0), {})
    assert made["rehearsal"] is None
    assert made["sensitivity"] is None


def test_what_is_no_number_is_null(make: Callable[..., Result], tmp_path: Path) -> None:
    alone = make(word="undecided", levels=1, spacing=1.0)
    broken = tuple(replace(choice, roughness=math.nan, chi_square=math.inf) for choice in alone.choices)
    made = run_summary(
        "t", "0", None, [profile_summary("a", replace(alone, choices=broken), {"section": "a_section.nc"})]
    )

    def refuse(token: str) -> float:
        pytest.fail(f"{token} is no JSON")

    text = write_summary(tmp_path, made).read_text(encoding="utf-8")
    read = json.loads(text, parse_constant=refuse)
    assert read["seconds"] is None
    refinement = read["profiles"][0]["refinement"]
    assert [refinement[name] for name in ("order", "remaining", "pick_drift", "jitter", "index")] == [
        None
    ] * 5
    assert refinement["index_reason"] == "it oscillates from grid to grid"
    assert refinement["notes"] == ["made-up note"]
    last = read["profiles"][0]["rules"][-1]
    assert (last["rule"], last["iteration"], last["roughness"], last["chi_square"]) == (
        "hanke-raus",
        None,
        None,
        None,
    )


def test_numbers_have_six_significant_digits(summary: dict[str, Any], tmp_path: Path) -> None:
    made = run_summary("t", "0", 1234.56789, [summary | {"tiny": 1.23456789e-12, "list": [2 / 3]}])
    read = json.loads(write_summary(tmp_path, made).read_text(encoding="utf-8"))
    assert read["seconds"] == 1234.57
    assert read["profiles"][0]["tiny"] == 1.23457e-12
    assert read["profiles"][0]["list"] == [0.666667]


@pytest.mark.parametrize(
    ("words", "worst"),
    [
        (["settled", "settled"], "settled"),
        (["settled", "undecided"], "undecided"),
        (["undecided", "drifting", "settled"], "drifting"),
    ],
)
def test_the_runs_verdict_is_the_worst_profiles(
    summary: dict[str, Any], words: list[str], worst: str
) -> None:
    profiles = [summary | {"refinement": summary["refinement"] | {"verdict": word}} for word in words]
    assert run_summary("t", "0", None, profiles)["verdict"] == worst
