"""Every file says where it comes from and what it must not be taken for."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from datetime import UTC, datetime, timedelta, timezone
from typing import Any

import pytest
from pyproj import CRS

from stillground.errors import ConfigError
from stillground.products.curtain import curtain_dataset
from stillground.products.history import history_dataset
from stillground.products.ladder import ladder_dataset
from stillground.products.picture import picture_dataset
from stillground.products.provenance import CAUTION, Provenance, argument, timestamp
from stillground.protocols import Result, RuleOptions

from .made_up_results import bent


def test_time_follows_source_date_epoch(monkeypatch: pytest.MonkeyPatch) -> None:
    # https://reproducible-builds.org/specs/source-date-epoch: seconds since 1970, in UTC.
    monkeypatch.setenv("SOURCE_DATE_EPOCH", "1000000000")
    assert timestamp() == datetime(2001, 9, 9, 1, 46, 40, tzinfo=UTC)
    monkeypatch.delenv("SOURCE_DATE_EPOCH")
    assert abs(timestamp() - datetime.now(UTC)) < timedelta(seconds=5)


@pytest.mark.parametrize("text", ["yesterday", "", "1e400", "9" * 30])
def test_a_time_that_is_none_is_refused_by_name(monkeypatch: pytest.MonkeyPatch, text: str) -> None:
    monkeypatch.setenv("SOURCE_DATE_EPOCH", text)
    with pytest.raises(ConfigError, match=f"SOURCE_DATE_EPOCH is '{text}': give whole seconds"):
        timestamp()


def test_attributes_carry_conventions_caution_and_origin(provenance: Provenance) -> None:
    said = provenance.attributes("What the file holds.")
    # CF first: a client that reads the first word must find it.
    assert said["Conventions"] == "CF-1.8, ACDD-1.3"
    assert said["comment"] == f"{CAUTION} The rule l-curve is weak here."
    assert said["input_sha256"] == "3f2a" * 16 + "  crosshole-ab.csv"
    assert said["configuration"] == provenance.config_text
    assert said["summary"] == "What the file holds."
    assert "numpy 2.0.0" in said["package_versions"]


def test_time_is_written_in_utc_wherever_it_was_taken(provenance: Provenance) -> None:
    there = provenance.created.astimezone(timezone(timedelta(hours=9)))
    said = replace(provenance, created=there).attributes("")
    assert said["date_created"] == "2026-12-01T05:10:00Z"
    assert said["history"] == "2026-12-01T05:10:00Z stillground run osmere-weir.toml"


@pytest.mark.parametrize("topic", ["dig, drill or load", "direct investigation", "licensed practice decide"])
def test_the_caution_says(topic: str) -> None:
    assert topic in CAUTION


def test_every_netcdf_file_of_a_profile_says_what_argues_its_answer(
    result: Result, surface: Any, crs: CRS, provenance: Provenance
) -> None:
    section = picture_dataset(
        "ab",
        result,
        easting=result.axes[0],
        northing=result.axes[0],
        crs=crs,
        surface=surface,
        tolerance=0.02,
        provenance=provenance,
    )
    common: dict[str, Any] = {"surface": surface, "provenance": provenance}
    for made in (
        section,
        history_dataset("ab", result, options=RuleOptions(), **common),
        ladder_dataset("ab", result, tolerance=0.02, **common),
        curtain_dataset(section, crs),
    ):
        assert made.attrs["chosen_rule"] == "gcv"
        assert made.attrs["chosen_iteration"] == 9.0
        assert made.attrs["chosen_chi_square"] == result.chosen.chi_square
        assert (made.attrs["verdict"], made.attrs["order"]) == ("settled", 2.0)
        assert set(provenance.attributes("")) <= set(made.attrs)


def test_of_a_nonlinear_measurement_its_own_misfit_and_other_starts_argue_too(result: Result) -> None:
    said, plain = argument(bent(result, 2.99)), argument(result)
    assert said.pop("chosen_chi_square_recomputed") == 2.99
    assert said.pop("start_dependence") == "a quarter slower: 0.148, half as steep: 2.06"
    assert said == plain


def test_an_order_that_cannot_be_told_is_left_out(make: Callable[..., Result]) -> None:
    assert "order" not in argument(make(levels=2, word="undecided"))
