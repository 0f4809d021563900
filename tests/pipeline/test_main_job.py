"""The whole main job through the command line, on the demo survey; products opened by other libraries."""

from __future__ import annotations

import json
import shutil
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest
import xarray as xr

Command = Callable[..., "subprocess.CompletedProcess[str]"]
CONFIGS = sorted((Path(__file__).parents[2] / "configs").glob("*.toml"))


@pytest.fixture(scope="module")
def told(stillground: Command, demo: Path, tmp_path_factory: pytest.TempPathFactory) -> Any:
    """The demo run once: its folder and what it printed."""
    folder = tmp_path_factory.mktemp("run")
    done = stillground("run", demo, "--out", folder, SOURCE_DATE_EPOCH="1700000000")
    assert done.returncode == 0, done.stderr
    return folder, done


@pytest.fixture(scope="module")
def folder(told: Any) -> Path:
    return Path(told[0])


@pytest.fixture(scope="module")
def section(folder: Path) -> xr.Dataset:
    with xr.open_dataset(folder / "crosshole-ab_section.nc") as ds:
        return ds.load()


def test_it_prints_rules_ladder_verdict_and_cautions(told: Any) -> None:
    printed = told[1].stdout
    for part in ("discrepancy", "gcv (chosen)", "0.2 m", "SETTLED", "no clearance to dig", "903 data"):
        assert part in printed
    assert "\x1b" not in printed, "plain text where it is not a terminal"
    assert "rung 4 of 4" in told[1].stderr, "progress goes to standard error"


def test_the_readme_shows_what_it_prints(told: Any, demo: Path) -> None:
    readme = (demo.parents[1] / "README.md").read_text()
    printed = {line.rstrip() for line in told[1].stdout.splitlines()}
    sample = readme.split("```text\n")[1].split("```")[0].splitlines()
    assert [line for line in sample if line not in printed] == []


def test_all_products_are_there_and_nothing_half_written(folder: Path) -> None:
    products = {p.name for p in folder.iterdir() if p.is_file()}
    layers = ("slowness", "velocity", "slowness_noise_part", "reliability")
    own = (
        "section.nc",
        "history.nc",
        "ladder.nc",
        "fit.csv",
        "curtain.nc",
        "curtain.qml",
        "points.csv",
        "overlay.csv",
    )
    maps = {f"map_{layer}.nc" for layer in layers}
    whole = {"summary.json", "report.html", "map.nc", "survey.nc"}
    assert products == whole | maps | {f"crosshole-ab_{what}" for what in own}
    figures = {p.name for p in (folder / "figures").iterdir()}
    assert figures == {f"crosshole-ab_{what}.{kind}" for kind in ("png", "pdf")
                       for what in ("section", "rules", "ladder", "residuals", "errors")}  # fmt: skip


def test_the_summary_argues_the_stop_and_the_grid(folder: Path) -> None:
    summary = json.loads((folder / "summary.json").read_text())
    (profile,) = summary["profiles"]
    assert (summary["schema"], summary["verdict"], profile["name"]) == (1, "settled", "crosshole-ab")
    assert {"discrepancy", "gcv", "risk", "whiteness"} <= {rule["rule"] for rule in profile["rules"]}
    assert [level["spacing"] for level in profile["refinement"]["levels"]] == [1.6, 0.8, 0.4, 0.2]
    assert profile["refinement"]["order"] > 1
    discrepancy = next(rule for rule in profile["rules"] if rule["rule"] == "discrepancy")
    assert discrepancy["chi_square"] == pytest.approx(1.0, abs=1e-5), "the fractional iterate hits its target"
    assert set(profile["files"]) == {"section", "history", "ladder", "fit", "curtain", "points", "overlay"}
    assert summary["files"] == {"map": "map.nc", "survey": "survey.nc"}
    assert all((folder / name).is_file() for name in profile["files"].values())


def test_the_section_shows_the_invented_ground(section: xr.Dataset) -> None:
    # The described ground of the demo: a loosened zone of 1520 m/s, stiff ground of 1900 m/s below.
    def velocity(distance: float, elevation: float) -> float:
        return float(section["velocity"].sel(distance=distance, elevation=elevation, method="nearest"))

    assert velocity(11.5, 199.5) < 1650
    assert velocity(9.0, 188.0) > 1850
    assert velocity(9.0, 204.0) == pytest.approx(1750, rel=0.05)


def test_ground_above_the_crest_is_masked(section: xr.Dataset) -> None:
    above = section["elevation"] > section["surface_altitude"]
    assert bool(above.any())
    for name in ("slowness", "velocity", "path_density", "mesh_change"):
        assert bool(section[name].where(above, drop=True).isnull().all())
        assert bool(section[name].where(~above).notnull().sum() == (~above).sum())


def test_the_trace_runs_through_both_boreholes(section: xr.Dataset) -> None:
    # Borehole tops as the configuration gives them.
    for x, y, distance in ((431250.0, 5312480.0, 0.0), (431265.5, 5312489.0, 18.0)):
        at = section.sel(distance=distance, method="nearest")
        assert float(np.hypot(at["easting"] - x, at["northing"] - y)) < 0.3


def test_total_path_length_is_kept_in_the_density(section: xr.Dataset, demo: Path) -> None:
    # The integral of ray length per area over the section is the summed length of all rays.
    table = pd.read_csv(demo.parents[1] / "datasets" / "osmere-weir" / "crosshole-ab.csv", comment="#")
    ends = {end: table[[f"{end}_{axis} [m]" for axis in "xyz"]].to_numpy() for end in ("source", "receiver")}
    lengths = np.linalg.norm(ends["source"] - ends["receiver"], axis=1).sum()
    density = section["path_density"].fillna(0).sortby("elevation")
    assert float(density.integrate(["distance", "elevation"])) == pytest.approx(lengths, rel=0.02)


def test_rasterio_reads_the_values_that_xarray_reads(folder: Path, section: xr.Dataset) -> None:
    # rasterio, a general raster library, on points at several elevations: catches upside-down sections.
    rasterio = pytest.importorskip("rasterio")
    with rasterio.open(f"NETCDF:{folder / 'crosshole-ab_section.nc'}:velocity") as raster:
        for distance, elevation in ((2.0, 205.0), (11.4, 199.6), (16.0, 188.0)):
            (read,) = next(raster.sample([(distance, elevation)]))
            there = section["velocity"].sel(distance=distance, elevation=elevation, method="nearest")
            assert read == pytest.approx(float(there), rel=1e-6)


@pytest.mark.parametrize("product", ["section", "history", "ladder"])
def test_compliance_checker_passes(folder: Path, product: str) -> None:
    # compliance-checker, the general checker of the CF conventions.
    checker = shutil.which("compliance-checker", path=str(Path(sys.executable).parent))
    if checker is None:
        pytest.skip("compliance-checker is not installed")
    file = folder / f"crosshole-ab_{product}.nc"
    done = subprocess.run(
        [checker, "-t", "cf:1.8", "-c", "lenient", str(file)], capture_output=True, text=True, check=False
    )
    assert done.returncode == 0, done.stdout


def test_the_fit_adds_up_to_the_misfit(folder: Path) -> None:
    fit = pd.read_csv(folder / "crosshole-ab_fit.csv")
    summary = json.loads((folder / "summary.json").read_text())
    chi_square = float((fit["residual_over_error"] ** 2).mean())
    assert chi_square == pytest.approx(summary["profiles"][0]["chosen"]["chi_square"], rel=1e-4)
    assert fit["row"].iloc[0] == 4, "rows are numbered as an editor numbers the table"
    assert list(fit.columns[:3]) == ["row", "observed_time [ms]", "predicted_time [ms]"]


def test_identical_inputs_give_identical_bytes(
    folder: Path, stillground: Command, demo: Path, tmp_path: Path
) -> None:
    done = stillground("run", demo, "--out", tmp_path / "again", "--quiet", SOURCE_DATE_EPOCH="1700000000",
                       NUMBA_NUM_THREADS="1", OPENBLAS_NUM_THREADS="1")  # fmt: skip
    assert (done.returncode, done.stdout, done.stderr) == (0, "", "")
    files = [p.relative_to(folder) for p in folder.rglob("*") if p.is_file()]
    different = [str(p) for p in files if (folder / p).read_bytes() != (tmp_path / "again" / p).read_bytes()]
    assert not different


def test_the_demo_survey_can_be_made_again_to_the_byte(
    stillground: Command, demo: Path, tmp_path: Path
) -> None:
    table = demo.parents[1] / "datasets" / "osmere-weir" / "crosshole-ab.csv"
    done = stillground("simulate", demo, "--set", f"simulate.output={tmp_path / 'again.csv'}")
    assert done.returncode == 0, done.stderr
    assert (tmp_path / "again.csv").read_bytes() == table.read_bytes()


@pytest.mark.parametrize("config", CONFIGS, ids=lambda c: c.stem)
def test_every_configuration_runs(stillground: Command, config: Path, tmp_path: Path) -> None:
    done = stillground("run", config, "--out", tmp_path, "--set", "output.products=[]")
    assert done.returncode == 0, done.stderr


def test_inspect_judges_without_reconstructing(stillground: Command, demo: Path, tmp_path: Path) -> None:
    done = stillground("inspect", demo, "--out", tmp_path)
    assert done.returncode == 0, done.stderr
    for part in ("903 data", "31 sources, 31 receivers", "errors made from floor and relative", "121 by 161",
                 "MiB", "positions lie at most"):  # fmt: skip
        assert part in done.stdout
    assert {p.name for p in tmp_path.rglob("*") if p.is_file()} == {
        "crosshole-ab_survey.png", "crosshole-ab_survey.pdf"}  # fmt: skip
