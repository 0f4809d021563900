"""The downhole demo through the command line: its table, its products, and what a column refuses."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import xarray as xr
from tests.conftest import ROOT, Command

from stillground.config import from_mapping, load
from stillground.errors import ConfigError
from stillground.ground import Ground
from stillground.pipeline.simulate import described_ground, simulate

DEMO = ROOT / "configs" / "osmere-weir-downhole.toml"


@pytest.fixture(scope="module")
def told(stillground: Command, tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, str]:
    """The demo run once: its folder and what it printed."""
    folder = tmp_path_factory.mktemp("run")
    done = stillground("run", DEMO, "--out", folder, "--set", "stopping.rules=['discrepancy']")
    assert done.returncode == 0, done.stderr
    return folder, done.stdout


def test_the_column_shows_the_invented_ground_within_its_error(told: tuple[Path, str]) -> None:
    column = xr.load_dataset(told[0] / "downhole-b3_column.nc")
    assert column["velocity"].dims == ("elevation",)
    assert column["velocity"].attrs["units"] == "m s-1"
    assert np.isnan(column["velocity"].sel(elevation=212.5, method="nearest")), "nothing above the ground"
    for elevation, velocity in ((196.5, 1480), (185, 1480), (178, 1600), (170, 1760)):
        at = column.sel(elevation=elevation, method="nearest")
        assert abs(float(at["slowness"]) - 1 / velocity) < 2.5 * float(at["slowness_total_error"])
    assert column.attrs["title"] == "Osmere Weir, borehole B3 (invented)"
    assert float(column["easting"]) == pytest.approx(431270.3)


def test_the_usual_differences_and_the_average_stand_beside_it(told: tuple[Path, str]) -> None:
    column = xr.load_dataset(told[0] / "downhole-b3_column.nc")
    interval = column["velocity_of_interval"]
    assert interval.dims == ("interval",)
    assert interval.size == 59
    assert np.std(interval) > np.std(column["velocity"].sel(elevation=slice(209, 150)))
    # The described ground's own time over 30 m: the sum of thickness over velocity.
    true = 30 / (5.5 / 1280 + 7 / 1400 + 6 / 1480 + 5 / 1380 + 6.5 / 1480)
    found, error = float(column["velocity_average_down_to_30_m"]), "slowness_average_down_to_30_m_total_error"
    assert abs(1 / found - 1 / true) < 3 * float(column[error])
    assert column["velocity_average_down_to_30_m"].attrs["units"] == "m s-1"
    (profile,) = json.loads((told[0] / "summary.json").read_text())["profiles"]
    (average,) = profile["averages"]
    assert (average["name"], average["property"], average["units"]) == ("down to 30 m", "velocity", "m s-1")
    assert average["value"] == pytest.approx(found, rel=1e-5)
    assert 0 < average["noise_part"] < average["total_error"]
    assert f"average velocity down to 30 m: {found:.4g} m s-1, ± {average['total_error']:.2g}" in told[1]


def test_all_figures_of_a_column_are_there(told: tuple[Path, str]) -> None:
    figures = {path.name for path in (told[0] / "figures").iterdir()}
    whats = ("column", "rules", "ladder", "residuals", "errors", "rehearsal")
    assert figures == {f"downhole-b3_{what}.{kind}" for kind in ("png", "pdf") for what in whats}


def test_the_demo_table_is_made_again_to_the_byte(tmp_path: Path) -> None:
    config, _ = load(DEMO, [f"simulate.output='{tmp_path / 'again.csv'}'"])
    path, n_data = simulate(config)
    assert n_data == 60
    assert path.read_bytes() == (ROOT / "datasets" / "osmere-weir" / "downhole-b3.csv").read_bytes()


def described(bodies: dict[str, Any]) -> Ground:
    data = {
        "title": "made up",
        "survey": {"kind": "downhole", "files": ["no.csv"]},
        "ground": {"spacing": "0.5 m", "correlation": {"vertical": "2 m"}},
        "simulate": {"output": "no.csv", "background": "1000 m/s", **bodies},
    }
    config = from_mapping(data)
    assert config.simulate is not None
    return described_ground(config.simulate, config.kind.axes)


def test_every_body_can_stand_in_a_column() -> None:
    at = {"centre": {"elevation": "-5 m"}, "radii": "2 m", "value": "500 m/s"}
    ground = described(
        {
            "disc": [at],
            "blob": [at | {"centre": {"elevation": "-20 m"}}],
            "box": [{"lower": {"elevation": "-12 m"}, "upper": {"elevation": "-10 m"}, "value": "2000 m/s"}],
            "layer": [{"top": "-30 m", "value": "4000 m/s"}],
        }
    )
    values = ground.values(np.array([[-5.0], [-6.9], [-7.1], [-11.0], [-20.0], [-40.0]]))
    np.testing.assert_allclose(1 / values[[0, 1, 2, 3, 4, 5]], [500, 500, 1000, 2000, 500, 4000], rtol=1e-4)


@pytest.mark.parametrize(
    ("bodies", "fault"),
    [
        (
            {
                "disc": [
                    {
                        "centre": {"distance": "1 m", "elevation": "-5 m"},
                        "radii": "2 m",
                        "value": "500 m/s",
                    }
                ]
            },
            "simulate.disc.0.centre: leave distance out",
        ),
        ({"layer": [{"top": "-5 m", "dip": 0.1, "value": "500 m/s"}]}, "simulate.layer.0: leave dip out"),
    ],
)
def test_bodies_that_need_a_distance_are_told_by_key(bodies: dict[str, Any], fault: str) -> None:
    with pytest.raises(ConfigError, match=fault):
        described(bodies)


def test_a_section_still_asks_for_the_distance(demo: Path) -> None:
    with pytest.raises(ConfigError, match=r"simulate\.box\.0\.lower: distance is missing"):
        load(demo, ["simulate.box=[{lower={elevation='1 m'},upper={elevation='2 m'},value='1 km/s'}]"])


def test_a_short_hole_says_how_deep_its_average_reaches(stillground: Command, tmp_path: Path) -> None:
    asked = ["--set", "physics.average_depth=100 m"]
    done = stillground("inspect", DEMO, "--out", tmp_path, *asked)
    assert done.returncode == 0, done.stderr
    assert (
        "the average to 100 m (physics.average_depth) reaches 62 m only, the deepest position" in done.stdout
    )
    done = stillground("inspect", DEMO, "--set", "physics.average_depth=5")
    assert done.returncode == 2
    assert "physics.average_depth" in done.stderr
