"""NetCDF with the names of the vocabulary reads as the CSV does."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
import xarray as xr

from stillground.errors import SurveyError
from stillground.survey import check, read

Picks = Callable[..., Path]


@pytest.fixture
def survey() -> xr.Dataset:
    names = ("source_x", "source_y", "source_z", "receiver_x", "receiver_y", "receiver_z")
    values = np.array([[0, 0, 10, 18, 0, 9.5], [0, 0, 10, 18, 0, 8.5], [0, 0, 10, 18, 0, 7.5]]).T
    ds = xr.Dataset(
        {name: ("pick", column, {"units": "m"}) for name, column in zip(names, values, strict=True)}
    )
    ds["time"] = ("pick", [9.0, 9.1, 9.3], {"units": "ms"})
    ds["line"] = ("pick", ["A", "B", "B"])
    ds["use"] = ("pick", np.array([1, 1, 0], dtype=np.int8))
    return ds


@pytest.mark.parametrize("layout", ["NETCDF4", "NETCDF3_64BIT"])
def test_it_reads_as_the_same_table_in_csv(
    survey: xr.Dataset, picks: Picks, tmp_path: Path, rays: tuple[str, ...], layout: str
) -> None:
    # A word that would make a timedelta of it, were it decoded.
    survey["time"].attrs["units"] = "milliseconds"
    survey.to_netcdf(tmp_path / "picks.nc", format=layout, engine="netcdf4")
    read_back = read(tmp_path / "picks.nc", expected=rays)
    header = ",".join([*(f"{name} [m]" for name in rays[:6]), "time [ms]", "line", "use"])
    path = picks("0,0,10,18,0,9.5,9,A,1", "0,0,10,18,0,8.5,9.1,B,1", "0,0,10,18,0,7.5,9.3,B,0", header=header)
    from_csv = read(path, expected=rays)
    assert read_back["row"].values.tolist() == [1, 2, 3]
    same = {"row": from_csv["row"] - 1}
    xr.testing.assert_equal(read_back, from_csv.assign_coords(same))
    assert read_back["time"].attrs | {"original_units": "ms"} == from_csv["time"].attrs


def test_what_the_reader_returns_can_be_saved_and_read_again(picks: Picks, tmp_path: Path) -> None:
    ds = read(picks("9,A,1.5", "9.1,B,2", header="time [ms],line,gain [dB]"))
    ds.to_netcdf(tmp_path / "picks.nc")
    again = read(tmp_path / "picks.nc")
    xr.testing.assert_equal(again.drop_vars("row"), ds.drop_vars("row"))
    assert again["gain"].attrs["units"] == "dB"


def test_fill_values_are_nan_and_told_by_row(
    survey: xr.Dataset, tmp_path: Path, rays: tuple[str, ...]
) -> None:
    survey["time"].values[1] = np.nan
    survey.to_netcdf(tmp_path / "picks.nc", encoding={"time": {"_FillValue": -1.0}})
    ds = read(tmp_path / "picks.nc", expected=rays)
    with pytest.raises(SurveyError, match="column time must not be empty or NaN: row 2"):
        check(ds, datum="time", expected=rays, floor=1e-4)


def test_numbers_for_lines_are_their_names(survey: xr.Dataset, tmp_path: Path, rays: tuple[str, ...]) -> None:
    survey["line"] = ("pick", [1.0, 2.0, 2.0])
    survey.to_netcdf(tmp_path / "picks.nc")
    assert read(tmp_path / "picks.nc", expected=rays)["line"].values.tolist() == ["1", "2", "2"]


def test_variables_on_several_dimensions_are_refused(survey: xr.Dataset, tmp_path: Path) -> None:
    survey["trace"] = ("node", [0.0, 1.0])
    survey.to_netcdf(tmp_path / "picks.nc")
    with pytest.raises(
        SurveyError, match=r"must share one dimension; it has source_x\(pick\).*trace\(node\)"
    ):
        read(tmp_path / "picks.nc")
    xr.Dataset({"time": 1.0}).to_netcdf(tmp_path / "scalar.nc")
    with pytest.raises(SurveyError, match="must share one dimension; it has none"):
        read(tmp_path / "scalar.nc")
