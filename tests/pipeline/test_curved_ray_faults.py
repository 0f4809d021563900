"""Faults of a refraction survey or a table beside it are told in one message, by file, row and column."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
import xarray as xr
from tests.conftest import Command
from tests.refraction_line import dome, line

from stillground.cli import tables
from stillground.config import load
from stillground.errors import SurveyError
from stillground.grid import Grid
from stillground.pipeline.profiles import read_profiles
from stillground.pipeline.run import Begun
from stillground.survey import write_table

CONFIG = """
title = "Small (invented)"
[survey]
kind = "curved-ray"
files = ["line.csv"]
[ground]
spacing = "1 m"
correlation = { horizontal = "12 m", vertical = "4 m" }
"""
SURFACE = "x [m],y [m],z [m]\n0,0,0.9\n24,0,2\n48,0,0.9\n"
VELOCITIES = "depth [m],velocity [m/s]\n0,400\n10,1500\n"


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    write_table(tmp_path / "line.csv", line(relief=dome))
    (tmp_path / "config.toml").write_text(CONFIG)
    return tmp_path


def told(folder: Path, *overrides: str) -> str:
    """The message about a folder's survey, without the folder."""
    config, _ = load(folder / "config.toml", overrides)
    with pytest.raises(SurveyError) as caught:
        read_profiles(config)
    return str(caught.value).replace(f"{folder}/", "")


@pytest.mark.parametrize(
    ("table", "said"),
    [
        (None, "beside.csv: there is no such file (beside.csv); mend physics.{key}, relative to"),
        ("folder", "beside.csv: is a folder, no table (beside.csv); mend physics.{key}, relative to"),
        ("", "beside.csv: holds no table; the first line should name the columns"),
        ("0,0,3\n", "beside.csv: row 1 should name the columns, but holds '0,0,3'"),
    ],
    ids=["missing", "folder", "empty", "headless"],
)
@pytest.mark.parametrize("key", ["surface", "start"])
def test_a_table_beside_the_survey_must_be_one(folder: Path, key: str, table: str | None, said: str) -> None:
    beside = folder / "beside.csv"
    if table == "folder":
        beside.mkdir()
    elif table is not None:
        beside.write_text(table)
    assert told(folder, f"physics.{key}=beside.csv").startswith(said.format(key=key))


@pytest.mark.parametrize(
    ("key", "table", "said"),
    [
        ("surface", SURFACE.replace("z [m]", "top [m]"), "column z is missing; the table has x, y, top"),
        ("surface", SURFACE.replace(",2\n", ",\n"), "column z must not be empty or NaN: row 3"),
        ("surface", SURFACE.replace(",2\n", ",two\n"), "column z must hold numbers: row 3 ('two')"),
        ("surface", SURFACE.replace(",2\n", ",inf\n"), "column z must be finite: row 3 (inf m)"),
        ("surface", SURFACE[:17], "a surface needs two points or more; it has 0"),
        ("surface", SURFACE.replace(",0,", ",500,"), "4.8 m of the section, the nearest 500 m off it"),
        ("surface", SURFACE.replace("48,", "30,"), "the surface covers 0 to 30 m along a line of 0 to 48 m"),
        ("start", VELOCITIES.replace("velocity", "v"), "column velocity is missing; the table has depth, v"),
        ("start", VELOCITIES.replace("1500", ""), "column velocity must not be empty or NaN: row 3"),
        ("start", VELOCITIES[:25], "it has no row in use; give velocities at one depth or more"),
        ("start", VELOCITIES.replace("0,400", "-1,400"), "column depth must not be negative: row 2 (-1 m)"),
        ("start", VELOCITIES.replace("m/s", "km/s"),
         "column velocity must lie within 50 to 10000 m/s: row 2 (400 km/s), row 3 (1500 km/s)"),
        ("start", "line," + VELOCITIES.replace("\n0", "\nB,0").replace("\n10", "\nB,10"),
         "column line: its rows are of B, the survey is of no named line"),
    ],
)  # fmt: skip
def test_cells_of_a_table_beside_the_survey_are_told_by_row_and_column(
    folder: Path, key: str, table: str, said: str
) -> None:
    (folder / "beside.csv").write_text(table)
    message = told(folder, f"physics.{key}=beside.csv")
    assert message.startswith("beside.csv: ")
    assert said in message
    assert "\n" not in message


def section(east: float = 0.0, north: float = 0.0, length: float = 48.0) -> xr.Dataset:
    """Velocity as the section of a run holds it, down from a surface at 1 m."""
    distance, elevation = np.linspace(0.0, length, 9), np.array([2.0, 1.0, -4.0, -9.0])
    velocity = np.tile([np.nan, 400.0, 900.0, 1400.0], (9, 1)).T + distance
    return xr.Dataset(
        {"velocity": (("elevation", "distance"), velocity, {"units": "m s-1"})},
        {
            "distance": distance,
            "elevation": elevation,
            "easting": ("distance", east + distance, {"units": "m"}),
            "northing": ("distance", np.full(9, north), {"units": "m"}),
        },
    )


@pytest.mark.parametrize("reverse", [False, True])
def test_a_section_of_an_earlier_run_starts_the_rays(folder: Path, reverse: bool) -> None:
    """Bilinear in the logarithm at its nodes, and up into the air and beyond the ends as at the nearest."""
    earlier = section()
    if reverse:
        earlier = earlier.assign_coords(easting=("distance", 48.0 - earlier.distance.values))
    earlier.to_netcdf(folder / "section.nc")
    config, _ = load(folder / "config.toml", ["physics.start=section.nc"])
    (profile,) = read_profiles(config)
    assert "start: velocities of section.nc" in profile.scene.facts
    assert folder / "section.nc" in profile.scene.inputs
    nodes = Grid((-6.0, -14.0), (6.0, 5.0), (11, 5))
    start = profile.scene.assemble(nodes).start.reshape(nodes.shape)
    along = np.clip(nodes.axes[0], 0.0, 48.0)
    along = 48.0 - along if reverse else along
    at_nodes = np.column_stack([along + v for v in (1400.0, 1400.0, 900.0, 400.0, 400.0)])
    np.testing.assert_allclose(np.exp(-start), at_nodes, rtol=1e-12)


@pytest.mark.parametrize(
    ("given", "said"),
    [
        (section(north=30.0), "is of another line: its section lies up to 30 m off this one"),
        (section(east=20.0), "along it from 20 to 68 m where this goes from 0 to 48 m"),
        (section(length=20.0), "along it from 0 to 20 m where this goes from 0 to 48 m"),
        (section().drop_vars("easting"), "has no variable easting; give a <profile>_section.nc of a run"),
        (-section(), "its velocity is not above zero everywhere in the ground"),
        (section().assign(velocity=section().velocity.assign_attrs(units="s")), "unit 's' does not convert"),
    ],
    ids=["aside", "along", "short", "no section", "negative", "unit"],
)
def test_a_section_that_is_not_of_this_line_is_told(folder: Path, given: xr.Dataset, said: str) -> None:
    given.to_netcdf(folder / "section.nc")
    message = told(folder, "physics.start=section.nc")
    assert message.startswith("section.nc: ")
    assert message.count("section.nc: ") == 1
    assert said in message


def test_what_is_no_section_file_is_told(folder: Path) -> None:
    (folder / "section.nc").write_text("velocity")
    assert told(folder, "physics.start=section.nc").startswith("section.nc: cannot be read as the section")


def test_positions_above_the_surface_are_told_by_their_own_table(folder: Path) -> None:
    (folder / "surface.csv").write_text(SURFACE.replace(",2\n", ",0\n"))
    message = told(folder, "physics.surface=surface.csv")
    assert message.startswith(
        "line.csv: positions stand above the surface of surface.csv: row 26 (source by "
    )
    assert message.endswith("check the elevations of both tables")


def test_a_line_deep_below_the_surface_is_doubted(folder: Path) -> None:
    config, _ = load(folder / "config.toml", ["physics.surface=surface.csv"])
    for raised, doubts in ((0.0, 0), (40.0, 1)):
        heights = "".join(f"{x},0,{dome(np.array(x)) + raised}\n" for x in (0.0, 12.0, 24.0, 36.0, 48.0))
        (folder / "surface.csv").write_text("x [m],y [m],z [m]\n" + heights)
        (profile,) = read_profiles(config)
        assert len(profile.scene.doubts) == doubts
    assert "all positions lie 39.9 m or more below the surface of surface.csv" in profile.scene.doubts[0]


@pytest.mark.parametrize(
    ("column", "value", "said"),
    [
        ("time", 0.01, "faster than the fastest ground, 10000 m s-1, even if later by three errors: row 12"),
        ("time", 0.0, "column time must be positive: row 12 (0 ms)"),
        ("time", np.nan, "column time must not be empty or NaN: row 12"),
        ("receiver_x", 0.0, "source and receiver fall on one point of the section in row 12"),
    ],
)
def test_a_pick_that_no_ground_gives_is_told_by_its_row(
    folder: Path, column: str, value: float, said: str
) -> None:
    survey = line(time_error=np.full(120, 1e-5))
    survey[column][10] = value / 1e3 if column == "time" else value
    if column == "receiver_x":
        survey["receiver_y"][10] = 0.3
    write_table(folder / "line.csv", survey)
    assert said in told(folder)


@pytest.mark.parametrize("kind", ["curved-ray", "straight-ray"])
def test_milliseconds_in_a_column_of_seconds_are_refused(folder: Path, kind: str) -> None:
    table = (folder / "line.csv").read_text()
    assert "time [ms]" in table
    (folder / "line.csv").write_text(table.replace("time [ms]", "time [s]"))
    message = told(folder, f"survey.kind={kind}")
    assert message.startswith(
        "line.csv: column time is taken in s, which makes the median apparent velocity "
    )
    survey = line(relief=dome)
    length = np.hypot(*(survey[f"receiver_{axis}"] - survey[f"source_{axis}"] for axis in "xz"))
    assert f"velocity {np.median(length / survey['time']) / 1000:.3g} m s-1, where" in message
    assert message.endswith("where the slowest ground has some 50; check its unit, and that of the positions")


def test_slow_ground_is_doubted_and_not_refused(folder: Path) -> None:
    """Median apparent velocities of some 38 m s-1: below all plausible ground, and above a tenth of it."""
    survey = line(relief=dome)
    write_table(folder / "line.csv", survey.assign(time=20 * survey["time"]))
    config, _ = load(folder / "config.toml")
    (profile,) = read_profiles(config)
    assert any("is the unit of time right?" in doubt for doubt in profile.scene.doubts)


def test_a_run_says_before_any_work_what_it_takes_a_survey_for(
    folder: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    config, _ = load(folder / "config.toml")
    (profile,) = read_profiles(config)
    tables.begun(Begun(profile, ()))
    said = capsys.readouterr().out.splitlines()
    assert "no pairs measured both ways: the data do not check the errors given" in said
    assert any(line.startswith("apparent velocities ") for line in said)


def test_zero_offset_picks_are_told_by_row_and_place(folder: Path) -> None:
    survey = line()
    survey["receiver_x"][3] = 0.0
    write_table(folder / "line.csv", survey)
    assert told(folder) == (
        "line.csv: source and receiver must be apart: row 5 (both at 0, 0, 0 m); mend them or set use to 0"
    )


def test_a_run_refuses_with_one_message_and_writes_nothing(folder: Path, stillground: Command) -> None:
    run = stillground("run", folder / "config.toml", "--set", "physics.start=no.csv", "--out", folder / "out")
    assert run.returncode == 2
    assert run.stderr.splitlines()[-1].startswith(f"stillground: {folder}/no.csv: there is no such file")
    assert "Traceback" not in run.stderr
    assert not (folder / "out").exists()
