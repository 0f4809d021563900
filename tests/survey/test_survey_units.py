"""Numbers with units come to SI, and nothing else passes."""

from __future__ import annotations

import contextlib

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from stillground.survey.units import quantity, to_si


@pytest.mark.parametrize(
    ("unit", "si", "factor"),
    [
        # Source: International System of Units, 9th brochure (2019), prefixes.
        ("ms", "s", 1e-3),
        ("us", "s", 1e-6),
        ("km", "m", 1e3),
        ("mS/m", "S m-1", 1e-3),
        ("ms/m", "s m-1", 1e-3),
        # Source: U.S. National Bureau of Standards (1959), Refinement of values for the yard and the pound.
        ("ft", "m", 0.3048),
        ("US_survey_foot", "m", 1200 / 3937),
        ("survey_foot", "m", 1200 / 3937),
    ],
)
def test_a_unit_has_its_defined_size(unit: str, si: str, factor: float) -> None:
    assert to_si(1.0, unit, si) == pytest.approx(factor, rel=1e-14)


@pytest.mark.parametrize(
    ("udunits", "plain"),
    [("S m-1", "S/m"), ("m s-1", "m/s"), ("m2", "m^2"), ("kg m-3", "kg/m^3"), ("s", "s")],
)
def test_udunits_text_and_plain_text_are_the_same_unit(udunits: str, plain: str) -> None:
    assert to_si(1.0, udunits, plain) == to_si(1.0, plain, udunits) == 1.0


def test_arrays_convert_as_numbers_do() -> None:
    np.testing.assert_array_equal(to_si(np.array([1.0, 2.0]), "km", "m"), [1000.0, 2000.0])


def test_case_tells_milliseconds_from_millisiemens() -> None:
    with pytest.raises(ValueError, match="unit 'mS' does not convert to s"):
        to_si(1.0, "mS", "s")


@pytest.mark.parametrize("unit", ["foo", "m/(", "3 m", "m+1", "__"])
def test_an_unknown_unit_is_told_by_name(unit: str) -> None:
    with pytest.raises(ValueError, match="unknown unit"):
        to_si(1.0, unit, "m")


@settings(deadline=None, max_examples=50)
@given(st.text(max_size=6).filter(lambda text: "**" not in text and "^" not in text))
def test_no_text_for_a_unit_gives_anything_but_a_value_or_a_value_error(unit: str) -> None:
    # Powers are left out: 9**9**9 is a number, and takes its time.
    with contextlib.suppress(ValueError):
        assert isinstance(to_si(1.0, unit, "m"), float)


@given(st.floats(-1e6, 1e6), st.sampled_from(["m", "cm", "km", "ft"]))
def test_a_quantity_is_its_number_converted(value: float, unit: str) -> None:
    assert quantity(f"{value!r} {unit}", "m") == pytest.approx(to_si(value, unit, "m"), rel=1e-12)


@pytest.mark.parametrize("text", ["0.25m", " 0.25 m ", "25 cm", ".25 m", "2.5e-1 m", "+0.25 metres"])
def test_a_quantity_may_be_written_in_many_ways(text: str) -> None:
    assert quantity(text, "m") == pytest.approx(0.25, rel=1e-14)


def test_a_velocity_gives_a_slowness_where_both_are_accepted() -> None:
    accepted = ("s m-1", "m s-1")
    assert quantity("2 km/s", accepted) == pytest.approx(5e-4, rel=1e-14)
    assert quantity("0.5 ms/m", accepted) == pytest.approx(5e-4, rel=1e-14)
    with pytest.raises(ValueError, match="must not be zero"):
        quantity("0 m/s", accepted)
    with pytest.raises(ValueError, match="does not convert to s/m or m/s"):
        quantity("3 m", accepted)


@pytest.mark.parametrize(
    ("text", "told"),
    [
        ("0.25", r"0\.25 has no unit; give it with one, like '0\.25 m'"),
        (0.25, r"0\.25 has no unit; give it with one, like '0\.25 m'"),
        ("m", r"'m' is no number with a unit; write it like '0\.25 m'"),
        ("nan m", r"is no number with a unit"),
        ("1e999 m", r"is no number with a unit"),
        (True, r"'True' is no number with a unit"),
        ("", r"'' is no number with a unit"),
        ("1,5 m", r"'1,5 m': unknown unit ',5 m'; it must convert to m"),
        ("3 furlongz", r"unknown unit 'furlongz'"),
        ("3 s", r"'3 s': unit 's' does not convert to m"),
    ],
)
def test_what_is_no_quantity_is_refused_with_what_would_be(text: object, told: str) -> None:
    with pytest.raises(ValueError, match=told):
        quantity(text, "m")
