"""Points of the ground surface come by distance along the section."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest

from stillground.errors import SurveyError
from stillground.survey import Section, read_surface

Picks = Callable[..., Path]
NORTH = Section(origin=(100.0, 50.0), direction=(0.0, 1.0), length=20.0)
HEADER = "x [m],y [m],z [m]"


def test_points_are_projected_and_sorted(picks: Picks) -> None:
    path = picks("100,70,12", "99,45,10", "103,60,11", header=HEADER)
    distance, elevation = read_surface(path, NORTH, 5.0)
    np.testing.assert_array_equal(distance, [-5, 10, 20])
    np.testing.assert_array_equal(elevation, [10, 11, 12])


def test_names_and_units_may_come_from_the_configuration(picks: Picks) -> None:
    path = picks("100,70,1200", "100,50,1000", header="E [m],y [m],z")
    _, elevation = read_surface(path, NORTH, 5.0, columns={"x": "E"}, units={"z": "cm"})
    np.testing.assert_allclose(elevation, [10, 12])


def test_all_faults_come_at_once(picks: Picks) -> None:
    with pytest.raises(SurveyError) as caught:
        read_surface(picks("100,high", header="x [m],z [m]"), NORTH, 5.0)
    assert caught.value.faults == (
        "column y is missing; the table has x, z",
        "column z must hold numbers: row 2 ('high')",
        "a surface needs two points or more; it has 1",
    )


@pytest.mark.parametrize("north", [5_700_050, -5_700_050])
def test_points_elsewhere_are_refused(picks: Picks, north: int) -> None:
    path = picks(f"500100,{north},12", f"500100,{north + 20},12", header=HEADER)
    with pytest.raises(
        SurveyError, match=r"0 of its points lie within 5 m of the section, the nearest 5e\+05 m off it"
    ):
        read_surface(path, NORTH, 5.0)


def test_points_of_other_lines_are_left_out(picks: Picks) -> None:
    path = picks("101,50,10", "140,55,99", "99,70,12", "140,65,99", header=HEADER)
    distance, elevation = read_surface(path, NORTH, 5.0)
    np.testing.assert_array_equal(distance, [0, 20])
    np.testing.assert_array_equal(elevation, [10, 12])


def test_a_surface_that_misses_the_length_of_the_section_is_refused(picks: Picks) -> None:
    path = picks("100,90,12", "100,99,12", header=HEADER)
    with pytest.raises(SurveyError, match="along a section of 0 to 20 m; give points along the profile"):
        read_surface(path, NORTH, 5.0)
