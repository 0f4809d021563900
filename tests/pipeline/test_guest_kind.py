"""A kind of measurement that somebody else has written goes through a run untouched."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest
import xarray as xr
from tests.conftest import Command

KIND = '''
"""Mean densities of drill cores: each core tells the mean between two elevations."""

import numpy as np
import xarray as xr
from pydantic import BaseModel
from pylops import MatrixMult

from stillground.protocols import Field, GroundProperty, Kind, Measurement, Scene


class Nothing(BaseModel, extra="forbid"):
    pass


def hats(grid, bottom, top):
    """Means of the nodal functions between two elevations, by a fine midpoint rule."""
    (z,) = grid.axes
    at = bottom[:, None] + (np.arange(200) + 0.5) / 200 * (top - bottom)[:, None]
    return np.maximum(0, 1 - np.abs(at[:, :, None] - z) / grid.spacing[0]).mean(axis=1)


class Cores(Scene):
    def assemble(self, grid):
        lower, upper = (end[:, 0] for end in self.paths)
        errors = np.full(lower.size, 20.0)
        which = {"core": np.arange(lower.size)}
        return Measurement(MatrixMult(hats(grid, lower, upper)), self.apparent, errors, which)

    def coverage(self, grid, correlation, rays=()):
        seen = hats(grid, *(end[:, 0] for end in self.paths)).sum(axis=0)
        density = grid.local_mean(seen / grid.weights(), correlation)
        return Field("cover", density, "m-1", "cores by elevation")

    def predict(self, ground):
        return ground.line_integrals(*self.paths) / np.abs(self.paths[1] - self.paths[0])[:, 0]

    def trace(self, distance):
        return 100.0 + 0 * distance, 200.0 + 0 * distance


class CoreDensity(Kind):
    name = "core-density"
    ground_property = GroundProperty("density", "kg m-3", "bulk density")
    columns = ("core_bottom", "core_top", "core_density")
    datum = "core_density"
    datum_units = "kg m-3"
    axes = ("elevation",)
    regularity = 0.5
    Settings = Nothing
    Plan = Nothing

    def place(self, survey, settings):
        lower, upper = survey["core_bottom"].values, survey["core_top"].values
        return Cores(
            lower=(lower.min(),),
            upper=(upper.max(),),
            positions={"core": 0.5 * (lower + upper)[:, None]},
            apparent=survey["core_density"].values,
            against={"elevation (m)": 0.5 * (lower + upper)},
            paths=(lower[:, None], upper[:, None]),
        )

    def plan(self, plan):
        return None
'''

CONFIG = """
title = "Cores of the made-up Osmere Weir (invented)"
[survey]
kind = "core-density"
files = ["cores.csv"]
[errors]
floor = "20 kg/m^3"
[ground]
spacing = "0.1 m"
correlation = { vertical = "2 m" }
[solver]
iterations = 20
[refinement]
levels = 3
[output]
products = ["section", "history", "map", "survey", "curtain", "points"]
"""


def density(z: np.ndarray) -> np.ndarray:
    return 1900 - 20 * z + 60 * np.sin(z / 1.5)


def profile_top(folder: Path) -> float:
    """The highest position, from where depth counts."""
    return float(np.loadtxt(folder / "cores.csv", delimiter=",", skiprows=1)[:, 1].max())


@pytest.fixture
def guest(tmp_path: Path) -> Path:
    """A folder as the package installer leaves it, with a survey beside it."""
    info = tmp_path / "guest" / "cores-1.2.dist-info"
    info.mkdir(parents=True)
    (tmp_path / "guest" / "cores.py").write_text(KIND)
    (info / "METADATA").write_text("Metadata-Version: 2.1\nName: cores\nVersion: 1.2\n")
    (info / "entry_points.txt").write_text("[stillground.physics]\ncore-density = cores:CoreDensity\n")
    bottom = np.arange(-15.0, 0, 0.5)
    noise = 20 * np.random.default_rng(4).standard_normal(bottom.size)
    fine = bottom[:, None] + np.linspace(0, 1, 101)
    mean = np.trapezoid(density(fine), dx=0.01, axis=1) + noise
    rows = [f"{b:.2f},{b + 1:.2f},{m:.2f}" for b, m in zip(bottom, mean, strict=True)]
    (tmp_path / "cores.csv").write_text("\n".join(["core_bottom,core_top,core_density", *rows]) + "\n")
    (tmp_path / "cores.toml").write_text(CONFIG)
    return tmp_path


def test_an_installed_kind_of_one_axis_goes_through_a_run(stillground: Command, guest: Path) -> None:
    done = stillground(
        "run", guest / "cores.toml", "--out", guest / "out", PYTHONPATH=str(guest / "guest"), cwd=guest
    )
    assert done.returncode == 0, done.stderr
    (profile,) = json.loads((guest / "out" / "summary.json").read_text())["profiles"]
    assert profile["refinement"]["verdict"] == "settled"
    assert profile["files"]["column"] == "cores_column.nc"
    column = xr.open_dataset(guest / "out" / "cores_column.nc")
    assert column["density"].dims == ("elevation",)
    assert column["density"].attrs["units"] == "kg m-3"
    assert float(column["easting"]) == 100.0
    inner = column["density"].sel(elevation=slice(-1, -14))
    found = np.sqrt(np.mean((inner - density(inner["elevation"].values)) ** 2))
    # Means over a metre within 20 kg m-3: the answer is nearer to the truth than any of them.
    assert found < 20
    # At one place in plan: a disc on the map, a borehole, and no curtain.
    assert set(profile["files"]) == {"column", "history", "ladder", "fit"}
    with xr.open_dataset(guest / "out" / "map.nc") as made:
        at = made["density"].sel(x=100.0, y=200.0, depth=6.0)
        beside = float(column["density"].interp(elevation=profile_top(guest) - 6.0))
        assert float(at) == pytest.approx(beside, rel=1e-3)
        away = np.hypot(made.x - 100, made.y - 200)
        assert float(away.where(made["density"].notnull().any("depth")).max()) < 2.0
    with xr.open_dataset(guest / "out" / "survey.nc") as layers:
        assert layers.sizes["station"] == 30
        assert layers["borehole_positions"].values.tolist() == [30]
        assert "lines" not in layers


def test_something_that_is_no_kind_is_refused_with_what_it_must_be(stillground: Command, guest: Path) -> None:
    (guest / "guest" / "cores.py").write_text("CoreDensity = 3\n")
    done = stillground(
        "run", guest / "cores.toml", "--out", guest / "out", PYTHONPATH=str(guest / "guest"), cwd=guest
    )
    assert done.returncode == 2
    assert "'core-density' from cores 1.2 is no kind of measurement" in done.stderr
    assert "stillground.protocols.Kind" in done.stderr
