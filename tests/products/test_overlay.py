"""Known ground beside the answer: where it lies, how far the answer is from it, and what is refused."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
import xarray as xr

from stillground.errors import SurveyError
from stillground.products.overlay import overlay, overlay_sentence, write_overlay
from stillground.protocols import GroundProperty, Known
from stillground.survey import read_known

SLOWNESS = GroundProperty("slowness", "s m-1", "slowness", ("velocity", "m s-1", "velocity"))
DENSITY = GroundProperty("density", "kg m-3", "bulk density")
NAN = float("nan")


def bent(errors: str = "noise_part") -> xr.Dataset:
    """A section along a trace that runs 30 m east and then 40 m north; 5e-4 s/m at 0 m, 1e-5 more a metre."""
    distance, elevation = np.arange(0.0, 71.0), np.arange(10.0, -1.0, -1.0)
    values = 5e-4 + 1e-5 * elevation[:, None] + 0 * distance
    plan = (np.minimum(distance, 30.0), np.maximum(distance - 30.0, 0.0))
    over = ("elevation", "distance")
    return xr.Dataset(
        {"slowness": (over, values), f"slowness_{errors}": (over, 0 * values + 1e-5)},
        {"distance": distance, "elevation": elevation}
        | {name: ("distance", axis) for name, axis in zip(("easting", "northing"), plan, strict=True)},
    )


def test_points_lie_at_the_nearest_place_of_a_bent_trace() -> None:
    points = np.array([[12.0, -2.0, 5.0], [33.0, 20.0, 5.0], [30.0, 10.0, 5.0], [12.0, 9.0, 5.0]])
    beside = overlay([Known(points, np.full(4, NAN), ("",) * 4)], bent(), SLOWNESS, 1.0, 4.0)
    # By the corner at 30 m: 12 m along the first leg, 20 and 10 m along the second; the last is 9 m off.
    np.testing.assert_allclose(beside.table["distance"], [12.0, 50.0, 40.0])
    np.testing.assert_allclose(beside.table["aside"], [2.0, 3.0, 0.0], atol=1e-12)
    assert beside.left_out == 1
    assert "3 points near the profile (1 out of reach), none with a value" in overlay_sentence(
        beside.summary()
    )


@pytest.mark.parametrize(("metres", "errors"), [(1.0, "noise_part"), (0.3048, "total_error")])
def test_differences_are_in_what_people_read_and_over_its_error(metres: float, errors: str) -> None:
    # Found: 5.5e-4 s/m between the nodes, 1818 m/s; its error of 1e-5 s/m is 33 m/s there.
    points = np.array([[12.0 * metres, 0.0, 5.0], [12.0 * metres, 0.0, 99.0]])
    beside = overlay(
        [Known(points, np.array([1 / 1900, 1 / 1900]), ("a", "b"))], bent(errors), SLOWNESS, metres, 4.0
    )
    inside, outside = beside.table.to_dict("records")
    assert inside["found"] == pytest.approx(1 / 5.5e-4)
    assert inside["difference"] == pytest.approx(1900 - 1 / 5.5e-4)
    assert inside["over_error"] == pytest.approx((1900 - 1 / 5.5e-4) / (1e-5 / 5.5e-4**2))
    assert np.isnan(outside["difference"])
    summary = beside.summary()
    assert (summary["points"], summary["compared"], summary["units"]) == (2, 1, "m s-1")
    assert summary["rms_difference"] == pytest.approx(abs(inside["difference"]))
    assert summary["within_two_errors"] == 0.0
    assert ("total error" in overlay_sentence(beside.summary())) == (errors == "total_error")


def test_the_table_says_its_units(tmp_path: Path) -> None:
    points = np.array([[12.0, 0.0, 5.0]])
    path = write_overlay(
        tmp_path, "a", overlay([Known(points, np.array([5e-4]), ("log",))], bent(), SLOWNESS, 1, 4)
    )
    head, row = path.read_text().splitlines()
    values = "known [m s-1],found [m s-1],difference [m s-1],over_error"
    assert head == f"name,x [m],y [m],z [m],distance [m],aside [m],{values}"
    assert row.startswith("log,12,0,5,12,0,2000,1818.182,181.8182,")


@pytest.mark.parametrize(
    ("heading", "seen", "values"),
    [
        ("value [km/s]", SLOWNESS, [1 / 1900, NAN]),
        ("value [ms/m]", SLOWNESS, [1.9e-3, NAN]),
        ("value [g/cm3]", DENSITY, [1900.0, NAN]),
    ],
)
def test_values_come_in_any_unit_of_the_property_or_of_what_people_read(
    heading: str, seen: GroundProperty, values: list[float], tmp_path: Path
) -> None:
    (tmp_path / "log.csv").write_text(f"x [m],y [m],z [m],{heading},name\n1,2,3,1.9,log\n1,2,4,,top\n")
    known = read_known(tmp_path / "log.csv", seen)
    np.testing.assert_allclose(known.values, values)
    np.testing.assert_allclose(known.points, [[1, 2, 3], [1, 2, 4]])
    assert known.names == ("log", "top")


@pytest.mark.parametrize(
    ("text", "said"),
    [
        ("x [m],y [m]\n1,2\n", r"log\.csv: column z is missing; give x, y, z"),
        ("x [m],y [m],z [m],value\n1,2,3,4\n", r"column value has no unit; head it 'value \[m s-1\]'"),
        ("x [m],y [m],z [m],value [kg]\n1,2,3,4\n", r"column value: .*kg"),
        ("x [m],y [m],z [m],value [m/s]\n1,2,3,4\n1,2,3,-4\n", "value is not above zero in row 3"),
        ("x [m],y [m],z [m]\n1,2,\n", "x, y or z is empty in row 2"),
    ],
)
def test_a_faulty_table_of_known_ground_is_refused_with_what_to_do(
    text: str, said: str, tmp_path: Path
) -> None:
    (tmp_path / "log.csv").write_text(text)
    with pytest.raises(SurveyError, match=said):
        read_known(tmp_path / "log.csv", SLOWNESS)
