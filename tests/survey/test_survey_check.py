"""All faults come at once; what can be used is told what it is."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
import xarray as xr

from stillground.errors import SurveyError
from stillground.survey import SurveyReport, check, read
from stillground.survey.faults import LISTED

Picks = Callable[..., Path]
PLACES = "source_x [m],source_y [m],source_z [m],receiver_x [m],receiver_y [m],receiver_z [m]"
WITHOUT_ERROR = f"{PLACES},time [ms]"
HEADER = f"{WITHOUT_ERROR},time_error [ms]"
WITH_USE = f"{HEADER},use"
GOOD = ("0,0,10,18,0,9.5,9,0.1", "0,0,10,18,0,8.5,9.1,0.1")


def checked(path: Path, rays: tuple[str, ...], **errors: float) -> tuple[xr.Dataset, SurveyReport]:
    return check(read(path, expected=rays), datum="time", expected=rays, **errors)


def refused(path: Path, rays: tuple[str, ...], **errors: float) -> tuple[str, ...]:
    with pytest.raises(SurveyError) as caught:
        checked(path, rays, **errors)
    return caught.value.faults


def test_all_faults_come_in_one_message(picks: Picks, rays: tuple[str, ...]) -> None:
    path = picks(
        *GOOD,
        "0,0,10,18,0,abc,9,0.1",
        "0,0,10,18,0,,9,0.1",
        "0,0,10,18,0,7,-9,0.1",
        "0,0,10,18,0,7,0,0.1",
        "0,0,10,18,0,7,9,0",
        "0,0,10,18,0,7,inf,0.1",
        "1,2,3,1,2,3,9,0.1",
        header=HEADER.replace("source_z [m]", "source_zz [m]"),
    )
    assert refused(path, rays) == (
        "column source_z is missing; did you mean 'source_zz'? "
        'Then set columns = { source_z = "source_zz" } in [survey] or rename it',
        "column receiver_z must hold numbers: row 4 ('abc')",
        "column receiver_z must not be empty or NaN: row 5",
        "column time must be finite: row 9 (inf ms)",
        "column time must be positive: row 6 (-9 ms), row 7 (0 ms)",
        "column time_error must be positive: row 8 (0 ms)",
    )
    # The distance between source and receiver needs all six.
    path.write_text(path.read_text().replace("source_zz", "source_z"))
    assert (
        "source and receiver must be apart: row 10 (both at 1, 2, 3 m); mend them or set use to 0"
        in refused(path, rays)
    )


def test_the_column_is_named_as_the_table_heads_it(picks: Picks) -> None:
    ds = read(picks("1,-2", "1,3", header="time [ms],pick [us]"), columns={"time": "pick"}, expected=["time"])
    with pytest.raises(SurveyError, match=r"column pick \(time\) must be positive: row 2 \(-2 us\)"):
        check(ds, datum="time", expected=["time"], floor=1e-4)


@pytest.mark.parametrize(
    ("cell", "advice"),
    [
        ('"1,5"', "write decimals with a point"),
        ("1.5 # late", "a comment needs a line of its own"),
        ("1_5", r"\('1_5'\)$"),
        ("n/a", r"\('n/a'\)$"),
    ],
)
def test_text_in_a_number_column_is_told_with_advice(
    picks: Picks, rays: tuple[str, ...], cell: str, advice: str
) -> None:
    (fault,) = refused(picks(*GOOD, f"0,0,10,18,0,7,{cell},0.1"), rays)
    assert fault.startswith("column time must hold numbers: row 4")
    with pytest.raises(SurveyError, match=advice):
        raise SurveyError("picks.csv", [fault])


def test_long_lists_are_cut_and_counted(picks: Picks, rays: tuple[str, ...]) -> None:
    (fault,) = refused(picks(*GOOD, *["0,0,10,18,0,7,x,0.1"] * (LISTED + 37)), rays)
    assert fault.endswith(f"row {LISTED + 3} ('x') and 37 more")


def test_rows_switched_off_are_left_out_with_their_faults(picks: Picks, rays: tuple[str, ...]) -> None:
    rows = [f"{row},1" for row in GOOD]
    ds, report = checked(picks(*rows, "x,,nan,1,0,0,-1,0,0", header=WITH_USE), rays)
    plain, _ = checked(picks(*GOOD), rays)
    assert ds.drop_attrs().identical(plain.drop_attrs())
    assert (report.rows, report.used, report.switched_off) == (3, 2, 1)
    assert not any("unreadable" in ds[name].attrs for name in ds.data_vars)


def test_use_must_be_zero_or_one(picks: Picks, rays: tuple[str, ...]) -> None:
    rows = [f"{row},1" for row in GOOD]
    faults = refused(
        picks(*rows, f"{GOOD[0].replace('9.5', 'x')},2", f"{GOOD[0]},no", f"{GOOD[0]},", header=WITH_USE),
        rays,
    )
    assert faults == (
        "column use must hold numbers: row 5 ('no')",
        "column use must not be empty or NaN: row 6",
        "column use must be 0 or 1: row 4 (2)",
        "column receiver_z must hold numbers: row 4 ('x')",
    )


def test_checking_leaves_what_was_read_as_it_was(picks: Picks, rays: tuple[str, ...]) -> None:
    ds = read(picks(*[f"{row},1" for row in GOOD], "x,,nan,1,0,0,-1,0,0", header=WITH_USE), expected=rays)
    before = ds.copy(deep=True)
    check(ds, datum="time", expected=rays)
    assert ds.identical(before)
    path = picks(*GOOD, "0,0,10,18,0,abc,9,0.1")
    ds = read(path, expected=rays)
    for _ in range(2):
        with pytest.raises(SurveyError, match=r"row 4 \('abc'\)"):
            check(ds, datum="time", expected=rays)


@pytest.mark.parametrize(
    ("given", "made", "origin"),
    [
        ({"floor": 3e-4}, [3e-4, 3e-4], "made from floor"),
        ({"relative": 0.04}, [4e-4, 8e-4], "made from relative"),
        # Root of the sum of squares: the 3-4-5 triangle.
        ({"floor": 3e-4, "relative": 0.04}, [5e-4, np.sqrt(73) * 1e-4], "made from floor and relative"),
    ],
)
def test_missing_errors_are_made(
    picks: Picks, rays: tuple[str, ...], given: dict[str, float], made: list[float], origin: str
) -> None:
    ds, report = checked(picks("0,0,10,18,0,9,10", "0,0,10,18,0,8,20", header=WITHOUT_ERROR), rays, **given)
    np.testing.assert_allclose(ds["time_error"], made, rtol=1e-12)
    told = {"long_name": "standard deviation of the travel time", "units": "s", "original_units": "ms"}
    assert ds["time_error"].attrs == told
    assert report.errors == origin


def test_a_column_of_errors_wins(picks: Picks, rays: tuple[str, ...]) -> None:
    ds, report = checked(picks(*GOOD), rays, floor=7.0)
    np.testing.assert_allclose(ds["time_error"], 1e-4)
    assert report.errors == "given by the table, and [errors] has no effect"


def test_errors_from_nowhere_are_refused_with_advice(picks: Picks, rays: tuple[str, ...]) -> None:
    (fault,) = refused(picks("0,0,10,18,0,9,10", "0,0,10,18,0,8,20", header=WITHOUT_ERROR), rays)
    assert fault.startswith("column time_error is missing")
    assert "errors.floor" in fault
    assert "errors.relative" in fault


def test_a_zero_reading_needs_a_floor(picks: Picks) -> None:
    expected = ["reading", "reading_error"]
    ds = read(picks("0", "-5", header="reading [mS/m]"), expected=expected)
    with pytest.raises(
        SurveyError, match=r"column reading must have an error above zero; set errors.floor: row 2"
    ):
        check(ds, datum="reading", expected=expected, relative=0.1)
    made, _ = check(ds, datum="reading", expected=expected, relative=0.1, floor=3e-4)
    np.testing.assert_allclose(made["reading_error"], [3e-4, np.hypot(3e-4, 5e-4)])


def test_errors_of_a_datum_from_elsewhere_must_be_positive_too(picks: Picks) -> None:
    expected = ["gravity", "gravity_error"]
    ds = read(picks("1,0", "-5,1", header="gravity [mGal],gravity_error [mGal]"), expected=expected)
    with pytest.raises(SurveyError, match=r"column gravity_error must be positive: row 2"):
        check(ds, datum="gravity", expected=expected)
    assert ds["gravity"].attrs["units"] == "mGal"


@pytest.mark.parametrize(("rows", "told"), [((), "no row"), (GOOD[:1], "only 1 row")])
def test_fewer_than_two_rows_are_refused(
    picks: Picks, rays: tuple[str, ...], rows: tuple[str, ...], told: str
) -> None:
    assert refused(picks(*rows), rays) == (f"it has {told} in use; a profile needs two or more",)


def test_each_line_needs_two_rows_and_each_row_its_line(picks: Picks, rays: tuple[str, ...]) -> None:
    rows = [f"{GOOD[0]},A", f"{GOOD[1]},A", f"{GOOD[1]},B"]
    path = picks(*rows, header=f"{HEADER},line")
    assert refused(path, rays) == ("line B has only 1 row in use; a profile needs two or more",)
    path = picks(*rows, f"{GOOD[1]},", f"{GOOD[1]},B", header=f"{HEADER},line")
    assert refused(path, rays) == ("column line must not be empty: row 5",)
    path = picks(*[f"{row}," for row in GOOD], header=f"{HEADER},line")
    assert checked(path, rays)[1].used == 2


def test_text_columns_must_not_be_empty(picks: Picks) -> None:
    expected = ["orientation", "reading"]
    ds = read(picks("vertical,1", ",2", header="orientation,reading [mS/m]"), expected=expected)
    with pytest.raises(SurveyError, match="column orientation must not be empty: row 3"):
        check(ds, datum="reading", expected=expected, floor=1e-4)


def test_repeated_rows_are_reported_and_kept(picks: Picks, rays: tuple[str, ...]) -> None:
    again = "0,0,10,18,0,9.5,9.05,0.2"
    ds, report = checked(picks(GOOD[0], GOOD[1], again, GOOD[1], "0,0,10,18,0,1,9,0.1"), rays)
    assert report.repeated == ((2, 4), (3, 5))
    assert ds.sizes["datum"] == 5
    lines = [f"{row},{line}" for row in GOOD for line in "AB"]
    assert checked(picks(*lines, header=f"{HEADER},line"), rays)[1].repeated == ()


def test_repeats_are_told_by_station_and_coils_for_induction(picks: Picks) -> None:
    expected = ["x", "y", "z", "height", "coil_spacing", "orientation", "reading"]
    path = picks(
        "0,0,5,1,2,vertical,30",
        "0,0,5,1,2,horizontal,20",
        "0,0,5,1,4,vertical,31",
        "0,0,5,1,2,vertical,30.5",
        header="x [m],y [m],z [m],height [m],coil_spacing [m],orientation,reading [mS/m]",
    )
    _, report = check(read(path, expected=expected), datum="reading", expected=expected, floor=1e-4)
    assert report.repeated == ((2, 5),)
    assert report.suspicious == ()


def test_a_wrong_pick_is_suspicious_and_kept(picks: Picks, rays: tuple[str, ...]) -> None:
    # Slowness 0.5 ms/m with a spread of some 1 %; row 12 is picked a period late.
    spread = [0.0, 0.01, -0.01, 0.02, -0.02, 0.005, -0.005, 0.015, -0.015, 0.0]
    rows = [f"0,0,0,{10 + i},0,0,{0.5 * (10 + i) * (1 + e)!r},0.1" for i, e in enumerate(spread)]
    ds, report = checked(picks(*rows, "0,0,0,10,0,0,6.5,0.1"), rays)
    assert ds.sizes["datum"] == 11
    ((row, slowness),) = report.suspicious
    assert row == 12
    assert slowness == pytest.approx(6.5e-4)


def test_suspicion_starts_at_five_robust_deviations(picks: Picks, rays: tuple[str, ...]) -> None:
    # Deviations -2..2 about 10 have median absolute deviation 1; 1.4826 is Hampel's factor (1974).
    def report(last: float) -> SurveyReport:
        times = [8.0, 9.0, 10.0, 10.0, 10.0, 11.0, 9.0, 11.0, 12.0, 8.5, last]
        return checked(picks(*[f"0,0,0,1,0,{i * 1e-5},{t},0.1" for i, t in enumerate(times)]), rays)[1]

    assert report(10 + 5 * 1.4826 - 0.1).suspicious == ()
    assert [row for row, _ in report(10 + 5 * 1.4826 + 0.1).suspicious] == [12]


def test_a_tail_without_a_gap_is_not_suspicious(picks: Picks, rays: tuple[str, ...]) -> None:
    # Slowness that falls with depth: the slowest rays are 10 robust deviations off, each close to the next.
    tail = [1 + float(t) ** 4 for t in np.linspace(0, 1, 120)]

    def rows(times: list[float]) -> list[int]:
        cells = [f"0,0,0,1,0,{i * 1e-5},{t},0.1" for i, t in enumerate(times)]
        return [row for row, _ in checked(picks(*cells), rays)[1].suspicious]

    assert rows(tail) == []
    assert rows([*tail, 2.5]) == [122]


def test_suspicion_is_by_line(picks: Picks, rays: tuple[str, ...]) -> None:
    # Row 7 would pass on line B, where the ground is slower.
    times = [(10.0, "A"), (10.1, "A"), (9.9, "A"), (10.2, "A"), (9.8, "A"), (20.0, "A")]
    times += [(2 * t, "B") for t, _ in times[:5] * 2]
    rows = [f"0,0,0,1,0,0,{t},0.1,{line}" for t, line in times]
    report = checked(picks(*rows, header=f"{HEADER},line"), rays)[1]
    assert [row for row, _ in report.suspicious] == [7]


def test_an_instrument_may_stand_on_the_ground_but_not_in_it(picks: Picks) -> None:
    expected = ["height", "reading"]
    ds = read(picks("0,1", "1,2", "-1,3", header="height [m],reading [mS/m]"), expected=expected)
    with pytest.raises(SurveyError, match=r": column height must not be negative: row 4 \(-1 m\)$"):
        check(ds, datum="reading", expected=expected, floor=1e-4)


def test_equal_slownesses_are_not_suspicious(picks: Picks, rays: tuple[str, ...]) -> None:
    rows = [f"0,0,0,{x},0,0,{0.3 * x!r},0.1" for x in (0.7, 1.1, 1.3, 1.7, 1.9, 2.3)]
    assert checked(picks(*rows), rays)[1].suspicious == ()


def test_the_report_tells_ranges_in_si_and_ignored_columns(picks: Picks, rays: tuple[str, ...]) -> None:
    _, report = checked(picks(*[f"{row},Ada" for row in GOOD], header=f"{HEADER},operator"), rays)
    assert report.ranges["time"] == pytest.approx((9e-3, 9.1e-3))
    assert report.ranges["receiver_z"] == (8.5, 9.5)
    assert set(report.ranges) == set(rays)
    assert report.ignored_columns == ("operator",)


def test_a_dataset_made_in_memory_is_checked_too() -> None:
    ds = xr.Dataset({"time": ("datum", [1e-3, 2e-3])})
    checked_ds, report = check(ds, datum="time", expected=["time"], floor=1e-4)
    np.testing.assert_array_equal(checked_ds["time"], ds["time"])
    assert report.source == "survey"
    with pytest.raises(SurveyError, match="column z is missing"):
        check(ds, datum="time", expected=["time", "z"], floor=1e-4)
    with pytest.raises(SurveyError, match=r"column time must be positive: row 2 \(-0.002\)"):
        check(ds.assign(time=("datum", [1e-3, -2e-3])), datum="time", expected=["time"], floor=1e-4)
