"""``xarray.open_dataset`` opens a survey table by the engine's name or the file's ending."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
import xarray as xr

from stillground.errors import SurveyError
from stillground.survey import read
from stillground.survey.backend import SurveyBackend

Picks = Callable[..., Path]


def test_it_is_what_the_reader_returns(picks: Picks) -> None:
    path = picks("9,A", "9.1,B", header="t_pick,line")
    columns, units = {"time": "t_pick"}, {"time": "ms"}
    opened = xr.open_dataset(path, engine="stillground", columns=columns, units=units)
    xr.testing.assert_identical(opened.load(), read(path, columns=columns, units=units))


def test_the_ending_is_enough(picks: Picks) -> None:
    np.testing.assert_allclose(xr.open_dataset(picks("9", header="time [ms]"))["time"], [9e-3])


def test_dropped_variables_may_be_faulty(picks: Picks) -> None:
    path = picks("9,x,3", header="time [ms],height [m],z")
    with pytest.raises(SurveyError, match="2 faults"):
        xr.open_dataset(path, engine="stillground")
    opened = xr.open_dataset(path, engine="stillground", drop_variables=["height", "z"])
    assert list(opened.data_vars) == ["time"]
    path = picks("9,x", header="time [ms],gain")
    assert "gain" not in xr.open_dataset(path, drop_variables="gain", units={"gain": "V"})


@pytest.mark.parametrize(
    ("name", "opens"),
    [("a.csv", True), (Path("b.CSV"), True), ("c.nc", False), ("csv", False), (b"d.csv", False)],
)
def test_only_csv_is_claimed(name: object, opens: bool) -> None:
    assert SurveyBackend().guess_can_open(name) is opens


def test_xarray_lists_the_engine() -> None:
    assert "survey tables" in xr.backends.list_engines()["stillground"].description
