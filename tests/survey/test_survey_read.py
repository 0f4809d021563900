"""A table becomes a labelled dataset in SI, or one message says what is wrong with it."""

from __future__ import annotations

import contextlib
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from stillground.errors import SurveyError
from stillground.survey import check, profiles, read
from stillground.survey.columns import COLUMNS

Picks = Callable[..., Path]
GOOD = ("0,0,10,18,0,9.5,9,0.1", "0,0,10,18,0,8.5,9.1,0.1")


def test_numbers_come_to_si_with_units_and_names(picks: Picks, rays: tuple[str, ...]) -> None:
    ds = read(picks(*GOOD), expected=rays)
    assert dict(ds.sizes) == {"datum": 2}
    assert set(ds.data_vars) == set(rays)
    np.testing.assert_allclose(ds["time"], [9e-3, 9.1e-3], rtol=1e-14)
    np.testing.assert_allclose(ds["receiver_z"], [9.5, 8.5], rtol=0)
    for name in (*rays, "row"):
        assert ds[name].attrs["units"]
        assert ds[name].attrs["long_name"]
    assert ds["time"].attrs["units"] == "s"


def test_rows_are_numbered_as_an_editor_shows_them(picks: Picks, rays: tuple[str, ...]) -> None:
    path = picks("# spread 1", "", GOOD[0], "  # spread 2", ",,,,,,,", GOOD[1])
    assert read(path, expected=rays)["row"].values.tolist() == [4, 7]


@pytest.mark.parametrize("encoding", ["utf-8", "utf-8-sig"])
@pytest.mark.parametrize("end", ["\n", "\r\n", "\r"])
@pytest.mark.parametrize("separator", [",", ";", "\t"])
def test_marks_line_ends_and_separators_make_no_difference(
    picks: Picks, rays: tuple[str, ...], encoding: str, end: str, separator: str
) -> None:
    path = picks("# Ōsmere", *GOOD)
    plain = read(path, expected=rays)
    text = path.read_text(encoding="utf-8").replace(",", separator).replace("\n", end)
    path.write_bytes(text.encode(encoding))
    assert read(path, expected=rays).identical(plain)


def test_padding_from_a_spreadsheet_is_no_column(picks: Picks, rays: tuple[str, ...]) -> None:
    path = picks(*GOOD)
    plain = read(path, expected=rays)
    text = path.read_text()
    path.write_text(text.replace("\n", ",,\n"))
    assert read(path, expected=rays).identical(plain)
    path.write_text(text.replace("\n", ",,\n", 1))
    assert read(path, expected=rays).identical(plain)


def test_columns_may_be_renamed_and_one_may_serve_twice(picks: Picks, rays: tuple[str, ...]) -> None:
    path = picks("0,10,18,9,9", "0,10,18,8,9", header="sx [m],sz [m],rx [m],rz [m],t_pick [ms]")
    # Neither has a y: the line runs due east, so any other column of one value will do.
    names = {
        "source_x": "sx",
        "source_y": "sx",
        "source_z": "sz",
        "receiver_x": "rx",
        "receiver_y": "sx",
        "receiver_z": "rz [m]",
        "time": "t_pick",
    }
    ds = read(path, columns=names, expected=rays)
    np.testing.assert_array_equal(ds["source_y"], ds["source_x"])
    np.testing.assert_array_equal(ds["receiver_z"], [9.0, 8.0])
    assert "column_faults" not in ds.attrs


def test_a_renamed_column_replaces_the_one_of_our_name(picks: Picks) -> None:
    path = picks("1,7", header="time [ms],t_pick [ms]")
    for expected in (("time",), None):
        ds = read(path, columns={"time": "t_pick"}, expected=expected)
        np.testing.assert_allclose(ds["time"], [7e-3])
        assert list(ds.data_vars) == ["time"]
        assert ds.attrs["ignored_columns"] == ["time"]


def test_a_unit_may_come_from_the_configuration(picks: Picks) -> None:
    path = picks("5", header="time")
    np.testing.assert_allclose(read(path, units={"time": "us"})["time"], [5e-6])
    path = picks("5", header="time [us]")
    np.testing.assert_allclose(read(path, units={"time": "microsecond"})["time"], [5e-6])


@pytest.mark.parametrize(
    ("header", "units", "told"),
    [
        ("time", {}, r"column time has no unit; head it 'time \[ms\]' or set units = \{ time = \"ms\" \}"),
        ("time []", {}, "column time has no unit"),
        ("time [m]", {}, "column time: unit 'm' does not convert to s; give a unit like 'ms'"),
        ("time [glarb]", {}, "column time: unknown unit 'glarb'"),
        ("time", {"time": "kg"}, "column time: unit 'kg' does not convert to s"),
        ("time [ms]", {"time": "s"}, "column time is in 'ms' by its heading and in 's' by survey.units"),
        ("time [ms]", {"tme": "s"}, "survey.units names 'tme', .* did you mean 'time'"),
        ("time [ms],time [s]", {}, "2 columns are headed 'time'"),
    ],
)
def test_a_column_without_a_fitting_unit_is_refused(
    picks: Picks, header: str, units: dict[str, str], told: str
) -> None:
    path = picks(*["5,5" if "," in header else "5"] * 2, header=header)
    with pytest.raises(SurveyError, match=told):
        read(path, units=units)
    with pytest.raises(SurveyError, match=told):
        check(read(path, units=units, expected=["time"]), datum="time", expected=["time"], floor=1e-4)


def test_a_missing_column_is_told_with_its_nearest_name(picks: Picks) -> None:
    path = picks("1,2", "3,4", header="TIME [ms],operator")
    ds = read(path, expected=["time"])
    with pytest.raises(SurveyError, match=r"column time is missing; did you mean 'TIME'\?.*time = \"TIME\""):
        check(ds, datum="time", expected=["time"], floor=1e-4)
    path = picks("1,2", "3,4", header="arrival [ms],operator")
    with pytest.raises(SurveyError, match="column time is missing; the table has arrival, operator"):
        check(read(path, expected=["time"]), datum="time", expected=["time"], floor=1e-4)
    for expected in (None, ["time"]):
        with pytest.raises(SurveyError, match=r"column t_pick \(time\) is missing; the table has arrival"):
            check(read(path, columns={"time": "t_pick"}, expected=expected), datum="time", expected=["time"])


def test_a_misspelt_error_column_is_not_passed_over(picks: Picks) -> None:
    path = picks("1,2", "3,4", header="time [ms],time_err [ms]")
    for floor in (1e-4, None):
        with pytest.raises(
            SurveyError, match="column time_error is missing; did you mean 'time_err'"
        ) as caught:
            check(read(path, expected=["time"]), datum="time", expected=["time"], floor=floor)
        assert len(caught.value.faults) == 1


def test_other_columns_are_left_out_and_named(picks: Picks) -> None:
    # Some resemble what a table may have, but need not.
    path = picks("1,Ada,2,x,1", "3,Bo,4,y,1", header="time [ms],user,height [m],lines,timer")
    ds = read(path, expected=["time"])
    assert list(ds.data_vars) == ["time"]
    assert ds.attrs["ignored_columns"] == ["user", "height", "lines", "timer"]
    assert "column_faults" not in ds.attrs


def test_without_a_kind_everything_is_taken(picks: Picks) -> None:
    path = picks("1,Ada,4.5,", "3,7,x_1,2", header="time [ms],operator,gain [dB],count")
    ds = read(path)
    assert ds["operator"].values.tolist() == ["Ada", "7"]
    assert ds["gain"].values.tolist() == ["4.5", "x_1"]
    assert ds["gain"].attrs["units"] == "dB"
    np.testing.assert_array_equal(ds["count"], [np.nan, 2.0])
    assert ds.attrs["ignored_columns"] == []


def test_without_a_kind_text_in_number_columns_raises_but_for_rows_switched_off(picks: Picks) -> None:
    path = picks("1,1", "late,0", header="time [ms],use")
    ds = read(path)
    np.testing.assert_array_equal(ds["time"], [1e-3, np.nan])
    assert "unreadable" not in ds["time"].attrs
    path = picks("1,1", "late,1", "3,maybe", header="time [ms],use")
    with pytest.raises(
        SurveyError, match=r"(?s)column time must hold numbers: row 3 \('late'\).*column use"
    ) as caught:
        read(path)
    assert len(caught.value.faults) == 2


def test_a_column_named_as_a_coordinate_is_left_out(picks: Picks) -> None:
    ds = read(picks("1,5,6", header="time [ms],row,datum"))
    assert ds["row"].values.tolist() == [2]
    assert ds.attrs["ignored_columns"] == ["row", "datum"]


@pytest.mark.parametrize(
    ("content", "told"),
    [
        (b"", "holds no table"),
        (b"# only\n\n# comments\n", "holds no table"),
        (b"1,2,3\n4,5,6\n", "row 1 should name the columns, but holds '1,2,3'"),
        (b"PK\x03\x04\x00\x00 junk", "neither a text table nor NetCDF"),
        ("t\u00e9 [ms]\n1\n".encode("latin-1"), "row 1 is no UTF-8 text"),
        (b"\xff\xfe\x01\x80junk", "row 1 is no UTF-8 text"),
        (b"\x89HDF\r\n\x1a\n broken", "damaged or no NetCDF: get the file again"),
        (b"CDF\x01" + b"\xff" * 60, "damaged or no NetCDF: get the file again"),
        (b'time [ms],"line\n1,2\n', "the header .row 1. is broken"),
        (b"x [m] y [m] z [m]\n1 2 3\n", "row 1 must separate its cells by commas, semicolons or tabs"),
        (b"time [ms],,line\n1,2,3\n", "no name for column 2"),
    ],
)
def test_what_is_no_table_is_refused(tmp_path: Path, content: bytes, told: str) -> None:
    path = tmp_path / "picks.csv"
    path.write_bytes(content)
    with pytest.raises(SurveyError, match=told) as caught:
        read(path)
    assert caught.value.source == str(path)
    assert len(caught.value.faults) == 1


@settings(deadline=None, max_examples=100, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(
    st.binary(max_size=40)
    | st.lists(
        st.sampled_from(["time", "[ms]", ",", ";", "\n", '"', "#", "1", "use", "line", " "]), max_size=20
    )
    .map("".join)
    .map(str.encode)
)
def test_whatever_a_file_holds_it_is_a_dataset_or_a_survey_error(tmp_path: Path, content: bytes) -> None:
    path = tmp_path / "picks.csv"
    path.write_bytes(content)
    with contextlib.suppress(SurveyError):
        assert read(path).sizes["datum"] >= 0
    with contextlib.suppress(SurveyError):
        ds = read(path, units={"time": "ms"}, expected=["time"])
        assert check(ds, datum="time", expected=["time"], floor=1.0)[1].used >= 2


def test_a_file_that_is_not_there_or_is_a_folder_is_refused(tmp_path: Path) -> None:
    with pytest.raises(SurveyError, match=r"none\.csv: there is no such file"):
        read(tmp_path / "none.csv")
    with pytest.raises(SurveyError, match="cannot be read: "):
        read(tmp_path)


def test_all_broken_rows_are_told_at_once(picks: Picks) -> None:
    path = picks("1,A", "1", "1,2,3", '1,"A', "2,B", header="time [ms],line")
    told = r"needs 2 cells like the header: row 3 \(1 cells\), row 4 \(3 cells\), row 5 \(unexpected end"
    with pytest.raises(SurveyError, match=told):
        read(path)


def test_quoted_text_may_hold_the_separator(picks: Picks) -> None:
    ds = read(picks('1, "A, left ""x"""', header="time [ms],line"))
    assert ds["line"].values.tolist() == ['A, left "x"']


def test_lines_make_profiles_in_the_order_of_the_table(picks: Picks) -> None:
    ds = read(picks("1,B", "2,A 1", "3,B", header="time [ms],line"))
    split = profiles(ds, "picks")
    assert list(split) == ["picks-B", "picks-A_1"]
    assert split["picks-B"]["row"].values.tolist() == [2, 4]
    assert split["picks-A_1"].attrs["source"].endswith("picks.csv, line A 1")


def test_without_lines_the_file_is_the_profile(picks: Picks) -> None:
    for path in (picks("1", "2", header="time [ms]"), picks("1,", "2,", header="time [ms],line")):
        split = profiles(read(path), "picks")
        assert list(split) == ["picks"]
        assert split["picks"].sizes["datum"] == 2


def test_two_lines_of_one_name_are_refused(picks: Picks) -> None:
    ds = read(picks("1,A/1", "2,A 1", header="time [ms],line"))
    with pytest.raises(SurveyError, match="'A 1' and another line both give the name picks-A_1"):
        profiles(ds, "picks")


def test_the_vocabulary_is_in_base_units() -> None:
    # Source: UDUNITS text of SI base and derived units without a prefix, as CF conventions 1.8 ask for.
    # A value has the unit that its kernel gives it.
    assert {column.units for column in COLUMNS.values()} == {"m", "s", "m s-1", "S m-1", "1", ""}
