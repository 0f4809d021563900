"""The section plane: least squares across, zero at the first source's end."""

from __future__ import annotations

import numpy as np
import pytest
import xarray as xr
from hypothesis import given
from hypothesis import strategies as st

from stillground.errors import SurveyError
from stillground.survey import fit_section, out_of_plane, plan_positions

ANGLES = st.floats(0, 2 * np.pi)


def spots(angle: float, along: list[float], across: list[float]) -> np.ndarray:
    """Positions about a place with national-grid coordinates."""
    east, north = np.cos(angle), np.sin(angle)
    s, n = np.array(along), np.array(across)
    return np.stack([500_000 + s * east - n * north, 5_700_000 + s * north + n * east], axis=1)


@given(ANGLES, st.booleans())
def test_a_straight_line_is_recovered_in_every_direction(angle: float, from_the_end: bool) -> None:
    along = [0.0, 3.0, 11.0, 18.0]
    positions = spots(angle, along, [0.0] * 4)
    section = fit_section(positions, positions[3 if from_the_end else 0])
    expected = [18 - s for s in along] if from_the_end else along
    assert section.length == pytest.approx(18, abs=1e-6)
    np.testing.assert_allclose(section.along(*positions.T), expected, atol=1e-6)
    np.testing.assert_allclose(section.across(*positions.T), 0, atol=1e-6)
    np.testing.assert_allclose(np.hypot(*section.direction), 1, rtol=1e-12)


@pytest.mark.parametrize("angle", [0.3, 1.0, 2.0])
def test_positions_on_a_straight_line_lie_0_m_off_it(angle: float) -> None:
    x, y = spots(angle, [0.0, 3.0, 11.0, 18.0], [0.0] * 4).T
    survey = xr.Dataset({"x": ("datum", x), "y": ("datum", y), "z": ("datum", 0 * x)})
    section = fit_section(plan_positions(survey), (x[0], y[0]))
    assert np.abs(section.across(x, y)).max() > 0, "but for rounding"
    assert out_of_plane(survey, section)[0] == 0


@given(ANGLES, st.floats(-50, 50), st.floats(-50, 50))
def test_along_and_across_are_coordinates_of_the_plan(angle: float, s: float, n: float) -> None:
    positions = spots(angle, [0.0, 20.0], [0.0, 0.0])
    section = fit_section(positions, positions[0])
    np.testing.assert_allclose(section.along(*section.plan(s)), s, atol=1e-6)
    np.testing.assert_allclose(section.across(*section.plan(s)), 0, atol=1e-6)
    ((x, y),) = spots(angle, [s], [n])
    np.testing.assert_allclose([section.along(x, y), section.across(x, y)], [s, n], atol=1e-6)


def test_no_other_line_has_smaller_squares_across() -> None:
    # The law of total least squares (Golub & Van Loan 1980), where all positions are near the line.
    positions = spots(0.7, [0.0, 4.0, 9.0, 15.0, 20.0], [0.03, -0.04, 0.05, -0.01, 0.02])
    section = fit_section(positions, positions[0])
    best = np.square(section.across(*positions.T)).sum()
    centred = positions - positions.mean(axis=0)
    for turn in (-1e-3, 1e-3):
        c, s = np.cos(turn), np.sin(turn)
        east, north = (
            c * section.direction[0] - s * section.direction[1],
            s * section.direction[0] + c * section.direction[1],
        )
        assert np.square(centred @ (-north, east)).sum() > best
    assert section.across(*positions.T).mean() == pytest.approx(0, abs=1e-9)


def test_one_misplaced_position_does_not_swing_the_line() -> None:
    # Least absolute distances pass through the others (common practice, no source).
    positions = spots(0.7, [0.0, 4.0, 9.0, 15.0, 20.0, 12.0], [0.0, 0.0, 0.0, 0.0, 0.0, 8.0])
    section = fit_section(positions, positions[0])
    across = np.abs(section.across(*positions.T))
    assert across[:5].max() < 0.15
    assert across[5] == pytest.approx(8.0, abs=0.15)


def test_a_place_counts_once_however_often_it_is_used() -> None:
    distinct = spots(0.3, [0.0, 5.0, 10.0], [0.0, 0.6, 0.0])
    many = np.concatenate([distinct, np.repeat(distinct[1:2], 500, axis=0)])
    assert fit_section(many, distinct[0]) == fit_section(distinct, distinct[0])


def test_a_first_source_off_the_ends_still_names_the_nearer_end() -> None:
    positions = spots(0.0, [0.0, 4.0, 10.0, 20.0], [0.0] * 4)
    assert fit_section(positions, positions[1]).along(*positions[0]) == pytest.approx(0, abs=1e-9)
    backwards = fit_section(positions, spots(0.0, [13.0], [0.0])[0])
    assert backwards.along(*positions[3]) == pytest.approx(0, abs=1e-9)
    assert backwards.direction[0] == pytest.approx(-1)


@pytest.mark.parametrize(("angle", "direction"), [(np.pi, (1, 0)), (-np.pi / 2, (0, 1)), (np.pi / 2, (0, 1))])
def test_a_first_source_in_the_middle_gives_east_or_north(angle: float, direction: tuple[int, int]) -> None:
    positions = spots(angle, [0.0, 10.0, 20.0], [0.0] * 3)
    np.testing.assert_allclose(fit_section(positions, positions[1]).direction, direction, atol=1e-9)


def test_a_line_north_but_for_roundoff_goes_north() -> None:
    positions = np.array([[0.0, 0.0], [-1e-12, 10.0], [-2e-12, 20.0]])
    np.testing.assert_allclose(fit_section(positions, positions[1]).direction, (0, 1), atol=1e-9)


def test_across_is_positive_to_the_left() -> None:
    section = fit_section(np.array([[0.0, 0.0], [10.0, 0.0]]), (0.0, 0.0))
    assert section.across(5.0, 2.0) == pytest.approx(2.0)


@pytest.mark.parametrize("n", [1, 3])
def test_one_place_makes_no_section(n: int) -> None:
    with pytest.raises(SurveyError, match=r"picks.csv: all positions lie at 3, 4 m in plan"):
        fit_section(np.array([[3.0, 4.0]] * n), (3.0, 4.0), source="picks.csv")


@pytest.fixture
def survey() -> xr.Dataset:
    """Two boreholes 20 m apart, the third receiver 1.5 m to the right."""
    columns = {
        "source_x": [0.0, 0.0, 0.0],
        "source_y": [0.0, 0.0, 0.0],
        "receiver_x": [20.0, 20.0, 20.0],
        "receiver_y": [0.0, 0.0, -1.5],
    }
    ds = xr.Dataset({name: ("datum", values) for name, values in columns.items()})
    return ds.assign_coords(row=("datum", [5, 8, 9])).assign_attrs(source="picks.csv")


def test_positions_are_sources_then_receivers_or_stations(survey: xr.Dataset) -> None:
    assert plan_positions(survey).tolist() == [[0, 0]] * 3 + [[20, 0], [20, 0], [20, -1.5]]
    stations = survey.rename(receiver_x="x", receiver_y="y").drop_vars(["source_x", "source_y"])
    assert plan_positions(stations).tolist() == [[20, 0], [20, 0], [20, -1.5]]


def test_the_largest_distance_off_the_plane_is_told_with_its_row(survey: xr.Dataset) -> None:
    section = fit_section(np.array([[0.0, 0.0], [20.0, 0.0]]), (0.0, 0.0))
    assert out_of_plane(survey, section, tolerance=1.5) == (1.5, 9)
    assert out_of_plane(survey, section, tolerance=np.inf) == (1.5, 9)


def test_past_the_tolerance_it_is_refused(survey: xr.Dataset) -> None:
    section = fit_section(np.array([[0.0, 0.0], [20.0, 0.0]]), (0.0, 0.0))
    told = r"picks.csv: row 9 lies 1.5 m off the section plane, with 1 m allowed; split the survey"
    with pytest.raises(SurveyError, match=told):
        out_of_plane(survey, section)
    survey["receiver_y"].values[2] = -0.99
    assert out_of_plane(survey, section) == (0.99, 9)
