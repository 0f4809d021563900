"""What is written reads back the same, byte for byte and whole or not at all."""

from __future__ import annotations

import os
from pathlib import Path

import numpy as np
import pytest
import xarray as xr
from hypothesis import given, settings
from hypothesis import strategies as st

from stillground.errors import OutputError
from stillground.survey import read, write_table

DECIMALS = {
    "source_x": (3, 1.0),
    "source_y": (3, 1.0),
    "source_z": (3, 1.0),
    "receiver_x": (3, 1.0),
    "receiver_y": (3, 1.0),
    "receiver_z": (3, 1.0),
    "time": (4, 1e-3),
    "time_error": (6, 1e-3),
}


def survey(columns: dict[str, list[float]], lines: list[str] | None = None) -> xr.Dataset:
    ds = xr.Dataset({name: ("datum", np.array(values)) for name, values in columns.items()})
    return ds if lines is None else ds.assign(line=("datum", np.array(lines, dtype=np.str_)))


NAMES = st.text(
    st.characters(exclude_categories=["C", "Z"], include_characters=" "), min_size=1, max_size=8
).map(lambda text: text.strip() or "-")


@st.composite
def surveys(draw: st.DrawFn) -> xr.Dataset:
    n = draw(st.integers(1, 6))
    numbers = st.floats(-6e6, 6e6)
    columns = {name: [draw(numbers) * unit for _ in range(n)] for name, (_, unit) in DECIMALS.items()}
    return survey(columns, [draw(NAMES) for _ in range(n)])


@settings(deadline=None, max_examples=60)
@given(ds=surveys())
def test_reading_gives_back_what_was_written_to_the_last_decimal(
    ds: xr.Dataset, tmp_path_factory: pytest.TempPathFactory
) -> None:
    path = tmp_path_factory.mktemp("table") / "picks.csv"
    write_table(path, ds, ["Osmere Weir, invented"])
    again = read(path)
    for name, (decimals, unit) in DECIMALS.items():
        step = unit * 10.0**-decimals
        np.testing.assert_allclose(again[name], ds[name], rtol=1e-14, atol=0.5001 * step)
    assert again["line"].values.tolist() == ds["line"].values.tolist()
    first = path.read_bytes()
    write_table(path, again, ["Osmere Weir, invented"])
    assert path.read_bytes() == first


def test_the_table_has_its_fixed_form(tmp_path: Path) -> None:
    columns = {name: [0.0, -0.0001] for name in DECIMALS} | {"time": [9.00004e-3, 0.0101]}
    ds = survey(columns | {"use": [1.0, 0.0]}, ["A", 'B, "left"']).assign(gain=("datum", [1.0, 2.0]))
    path = tmp_path / "picks.csv"
    write_table(path, ds, ["Osmere Weir\nleft", ""])
    assert path.read_bytes().decode() == (
        "# Osmere Weir\n# left\n#\n"
        "source_x [m],source_y [m],source_z [m],receiver_x [m],receiver_y [m],receiver_z [m],"
        "time [ms],time_error [ms],line,use\n"
        "0.000,0.000,0.000,0.000,0.000,0.000,9.0000,0.000000,A,1\n"
        '0.000,0.000,0.000,0.000,0.000,0.000,10.1000,-0.100000,"B, ""left""",0\n'
    )


def test_induction_tables_are_in_millisiemens(tmp_path: Path) -> None:
    ds = xr.Dataset({"reading": ("datum", [0.0305]), "orientation": ("datum", ["vertical"])})
    write_table(tmp_path / "stations.csv", ds)
    assert (tmp_path / "stations.csv").read_text() == "orientation,reading [mS/m]\nvertical,30.5000\n"


def test_a_place_that_cannot_be_written_is_told(tmp_path: Path) -> None:
    ds = survey({"time": [1e-3]})
    (tmp_path / "file").touch()
    with pytest.raises(OutputError, match=r"file/picks.csv cannot be written"):
        write_table(tmp_path / "file" / "picks.csv", ds)


def test_a_failure_leaves_the_old_file_and_no_other(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    path = tmp_path / "picks.csv"
    write_table(path, survey({"time": [1e-3]}))
    before = path.read_bytes()

    def full(*_: object) -> None:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(os, "replace", full)
    with pytest.raises(OutputError, match="No space left"):
        write_table(path, survey({"time": [2e-3]}))
    assert path.read_bytes() == before
    assert [each.name for each in tmp_path.iterdir()] == ["picks.csv"]
