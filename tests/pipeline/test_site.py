"""What all profiles of a run have in common: the map through them and the layers of the survey."""

from __future__ import annotations

import json
import subprocess
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
import xarray as xr

import stillground as package
from stillground.config import load
from stillground.errors import ConfigError
from stillground.pipeline.run import run
from stillground.pipeline.site import plan_slices
from stillground.progress import finish
from stillground.survey import write_table

Command = Callable[..., "subprocess.CompletedProcess[str]"]

QUICK = ["refinement.levels=2", "ground.spacing=0.5 m", "solver.iterations=8", "errors.outliers=off"]
PRODUCTS = "output.products=['section', 'history', 'map', 'survey']"


@pytest.fixture
def crossed(small: Path, survey: xr.Dataset) -> Path:
    """Two lines of one file that cross in their middles, on the positions of the small survey."""
    turned = survey.assign(
        {
            f"{end}_{axis}": ("datum", survey[f"{end}_x"].to_numpy() * (axis == "y") + shift)
            for end in ("source", "receiver")
            for axis, shift in (("x", 4.5), ("y", -4.5))
        }
    )
    both = xr.concat([survey, turned], "datum", data_vars="all")
    names = np.repeat(["A", "B"], survey.sizes["datum"])
    both = both.assign(line=("datum", names)).assign_coords(row=("datum", np.arange(1, names.size + 1)))
    write_table(small / "small.csv", both)
    return small


def work(folder: Path, out: str, *overrides: str, resume: bool = False) -> Path:
    config, text = load(folder / "small.toml", [*QUICK, *overrides])
    finish(run(config, text, folder / out, resume=resume))
    return folder / out


def test_lines_of_a_run_stand_on_one_map_and_cross_between(crossed: Path) -> None:
    out = work(crossed, "out", PRODUCTS)
    with xr.open_dataset(out / "map.nc") as made, xr.open_dataset(out / "survey.nc") as layers:
        # Depth 4 below the highest position, at -0.5 m; the lines cross at x = 4.5, y = 0.
        at = made.velocity.sel(depth=4.0).sel(x=4.5, y=0.0, method="nearest")
        values = []
        for name in ("small-A", "small-B"):
            with xr.open_dataset(out / f"{name}_section.nc") as section:
                values.append(float(section.velocity.interp(distance=4.5, elevation=-4.5)))
        assert min(values) * (1 - 1e-3) < float(at) < max(values) * (1 + 1e-3)
        assert layers.line_profile.values.tolist() == ["small-A", "small-B"]
        assert layers.sizes["borehole"] == 4
    summary = json.loads((out / "summary.json").read_text())
    assert summary["files"] == {"map": "map.nc", "survey": "survey.nc"}
    assert (out / "small-A_section.nc").is_file()


def test_a_resumed_run_gives_the_map_and_layers_of_a_whole_one(
    crossed: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setenv("SOURCE_DATE_EPOCH", "1700000000")
    wanted = (PRODUCTS, "errors.statics={source = 1.0}")
    whole = work(crossed, "whole", *wanted)
    parts = work(crossed, "parts", *wanted)
    kept = (parts / "small-A_section.nc").stat().st_mtime_ns
    for name in ("small-B_section.nc", "map.nc", "survey.nc"):
        (parts / name).unlink()
    work(crossed, "parts", *wanted, resume=True)
    assert (parts / "small-A_section.nc").stat().st_mtime_ns == kept
    for path in whole.iterdir():
        assert (parts / path.name).read_bytes() == path.read_bytes(), path.name


def test_a_profile_whose_section_is_not_there_is_made_again_for_the_map(small: Path) -> None:
    work(small, "out", "output.products=['map']")
    out = work(small, "out", "output.products=['map']", resume=True)
    assert json.loads((out / "summary.json").read_text())["files"] == {"map": "map.nc"}


def test_stations_carry_the_misfit_and_static_of_their_own_data(small: Path) -> None:
    out = work(small, "out", PRODUCTS, "errors.statics={source = 1.0}")
    fit, table = pd.read_csv(out / "small_fit.csv"), pd.read_csv(small / "small.csv", comment="#")
    table["residual"], table["weight"] = fit["residual_over_error"], fit["weight"]
    with xr.open_dataset(out / "survey.nc") as layers, xr.open_dataset(out / "small_history.nc") as history:
        found = layers[[n for n in layers if str(n).startswith("station_")]].to_dataframe()
        statics = history["source_static"].to_numpy()
    sources = found[found.station_what == "source"]
    receivers = found[found.station_what == "receiver"]
    for stations, column in ((sources, "source_z [m]"), (receivers, "receiver_z [m]")):
        by_height = table.groupby(column)
        heights = stations.station_z.to_numpy().round(3)
        for name in ("residual", "weight"):
            expected = by_height[name].mean().loc[heights]
            np.testing.assert_allclose(stations[f"station_{name}"], expected, atol=1e-6)
        assert stations.station_data.tolist() == by_height.size().loc[heights].tolist()
    np.testing.assert_allclose(sources.station_static, statics)
    assert np.abs(statics).max() > 0
    assert receivers.station_static.isna().all()


def test_products_not_wanted_are_not_written(small: Path) -> None:
    out = work(small, "out", "output.products=['points']")
    assert {path.name for path in out.iterdir()} == {
        "summary.json", "small_fit.csv", "small_ladder.nc", "small_points.csv"}  # fmt: skip
    assert json.loads((out / "summary.json").read_text())["files"] == {}


def test_too_fine_a_map_is_refused_before_anything_is_written(stillground: Command, small: Path) -> None:
    done = stillground("run", "small.toml", "--set", "map.spacing=1 mm", cwd=small)
    assert done.returncode == 2
    assert "map.spacing: at 0.001 m the map of all profiles takes" in done.stderr
    assert "take 0.01 m, or fewer slices" in done.stderr
    assert not (small / "results").exists()


def test_a_map_is_coarser_by_itself_where_a_survey_is_large(small: Path) -> None:
    from stillground.pipeline.grids import plan_grids
    from stillground.pipeline.profiles import read_profiles

    config, _ = load(small / "small.toml", QUICK)
    (profile,) = read_profiles(config)
    planned = [(profile, plan_grids(profile, config)[-1])]
    slicing = plan_slices(planned, config)
    # An eighth of 3 m, up in the series 1, 2, 5; every 2 m down to the lowest node.
    assert (slicing.spacing, slicing.reach, slicing.levels) == (0.5, 3.0, (2.0, 4.0, 6.0, 8.0, 10.0, 12.0))
    far, _ = load(small / "small.toml", [*QUICK, "map.reach=20 km"])
    assert plan_slices(planned, far).spacing == 50
    with pytest.raises(ConfigError, match=r"map\.spacing"):
        plan_slices(planned, load(small / "small.toml", ["map.reach=20 km", "map.spacing=1 m"])[0])


def test_slices_at_elevations_come_from_the_top_down(small: Path) -> None:
    out = work(small, "out", "output.products=['map']", "map.elevations=['-8 m', '-2 m', '-5 m']")
    with xr.open_dataset(out / "map_velocity.nc") as made:
        assert made.elevation.values.tolist() == [-2, -5, -8]
        assert made.elevation_top.values.tolist() == [-0.5, -3.5, -6.5]
        assert made.velocity.notnull().any(["x", "y"]).all()


def test_a_run_in_feet_places_its_files_in_feet(small: Path, survey: xr.Dataset) -> None:
    # EPSG:2263 counts in US survey feet of 1200/3937 m (NIST Handbook 44, from memory).
    foot = 1200 / 3937
    there = {"x": 980_000 * foot, "y": 200_000 * foot, "z": 0.0}
    shifted = {f"{end}_{a}": survey[f"{end}_{a}"] + there[a] for end in ("source", "receiver") for a in "xyz"}
    write_table(small / "small.csv", survey.assign(shifted))
    wanted = "output.products=['map', 'survey', 'points']"
    out = work(small, "out", wanted, "survey.crs=EPSG:2263", "map.spacing=2 survey_foot")
    with xr.open_dataset(out / "map.nc") as made, xr.open_dataset(out / "survey.nc") as layers:
        np.testing.assert_allclose(np.diff(made.x), 2, atol=1e-6)
        assert float(abs(made.x - 980_000).min()) < 2
        np.testing.assert_allclose(layers.line_x[[0, -1]], [980_000, 980_000 + 9 / foot], atol=0.01)
    points = pd.read_csv(out / "small_points.csv")
    assert points["z [US_survey_foot]"].min() * foot == pytest.approx(-12.5, abs=0.6)


def test_python_writes_them_too_and_the_result_says_its_verdict(small: Path) -> None:
    wanted = "output.products=['map', 'survey', 'curtain']"
    (result,) = package.run_config(small / "small.toml", out=small / "out", overrides=[*QUICK, wanted])
    assert {"map.nc", "survey.nc", "small_curtain.nc"} <= {path.name for path in (small / "out").iterdir()}
    assert result.picture.attrs["verdict"] == result.verdict
