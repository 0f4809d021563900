"""The invented conductivity survey along the crest, through the command line."""

from __future__ import annotations

import json
import subprocess
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
import xarray as xr

Command = Callable[..., "subprocess.CompletedProcess[str]"]
ROOT = Path(__file__).parents[2]
CONFIG = ROOT / "configs" / "osmere-weir-induction.toml"
LINES = ("crest", "upstream", "downstream")


@pytest.fixture(scope="module")
def folder(stillground: Command, tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The demo run once, without figures."""
    folder = tmp_path_factory.mktemp("run")
    done = stillground("run", CONFIG, "--out", folder, "--set", "output.products=['section']")
    assert done.returncode == 0, done.stderr
    return folder


def test_all_three_lines_settle_at_second_order(folder: Path) -> None:
    profiles = json.loads((folder / "summary.json").read_text())["profiles"]
    assert [profile["name"] for profile in profiles] == [f"induction-{line}" for line in LINES]
    for profile in profiles:
        assert profile["refinement"]["verdict"] == "settled"
        assert profile["refinement"]["order"] > 1.7


@pytest.mark.parametrize("line", LINES)
def test_the_section_shows_the_invented_core_and_its_gap(folder: Path, line: str) -> None:
    # The described ground: clay of 38 mS/m, at 31.5 m a gap of 10 mS/m, softer clay of 60 mS/m at 50 m.
    with xr.open_dataset(folder / f"induction-{line}_section.nc") as section:
        at = {
            x: float(section["conductivity"].sel(distance=x, elevation=208.2, method="nearest"))
            for x in (10.0, 31.5, 50.0)
        }
        assert at[31.5] < 0.6 * at[10.0] < 0.6 * at[50.0]
        assert section["conductivity"].attrs["units"] == "S m-1"
        above = section["elevation"] > section["surface_altitude"]
        assert bool(section["conductivity"].where(above, drop=True).isnull().all())


def test_the_crest_runs_past_both_boreholes(folder: Path) -> None:
    # Borehole tops as the crosshole demo has them, 20 and 38 m along the line.
    with xr.open_dataset(folder / "induction-crest_section.nc") as section:
        for x, y, distance in ((431250.0, 5312480.0, 20.0), (431265.59, 5312489.0, 38.0)):
            at = section.sel(distance=distance, method="nearest")
            assert float(np.hypot(at["easting"] - x, at["northing"] - y)) < 0.3


def test_the_survey_can_be_made_again_to_the_byte(stillground: Command, tmp_path: Path) -> None:
    done = stillground("simulate", CONFIG, "--set", f"simulate.output={tmp_path / 'again.csv'}")
    assert done.returncode == 0, done.stderr
    table = ROOT / "datasets" / "osmere-weir" / "induction.csv"
    assert (tmp_path / "again.csv").read_bytes() == table.read_bytes()


def test_inspect_tells_how_many_readings_are_informative(stillground: Command, tmp_path: Path) -> None:
    done = stillground("inspect", CONFIG, "--out", tmp_path)
    assert done.returncode == 0, done.stderr
    for part in ("61 stations", "informative at a station: 3 of 6 readings", "was not checked"):
        assert part in done.stdout
    assert len(list((tmp_path / "figures").glob("*_survey.png"))) == 3
