"""Laws of the curtain and the points: the section where it stands, and nothing where there is no ground."""

from __future__ import annotations

from pathlib import Path
from xml.etree import ElementTree

import netCDF4
import numpy as np
import pandas as pd
import pytest
import xarray as xr

from stillground.products import cells
from stillground.products.curtain import curtain_dataset, write_curtain
from stillground.products.line import Line
from stillground.products.points import points_table, write_points
from stillground.protocols import Result

from .crossing_lines import CENTRES, bent, make_line, unit
from .made_up_results import slowness

UTM = "EPSG:32631"
EAST, NORTH = CENTRES[UTM]


@pytest.fixture(scope="module")
def line(result: Result) -> Line:
    return make_line("bent", result, bent(result.axes[0]), UTM)


@pytest.fixture(scope="module")
def curtain(line: Line) -> xr.Dataset:
    return curtain_dataset(line.picture, unit(UTM)[0])


def rings(curtain: xr.Dataset) -> np.ndarray:
    """Shape (n_cells, 5, 3)."""
    return np.stack([curtain[f"cell_{axis}"].to_numpy() for axis in "xyz"], axis=-1).reshape(-1, 5, 3)


def test_cells_are_closed_upright_quadrilaterals(curtain: xr.Dataset) -> None:
    found = rings(curtain)
    np.testing.assert_array_equal(found[:, 0], found[:, 4])
    np.testing.assert_array_equal(found[:, 0, :2], found[:, 1, :2])
    np.testing.assert_array_equal(found[:, 2, :2], found[:, 3, :2])
    np.testing.assert_allclose(found[:, 0, 2] - found[:, 1, 2], 0.25)
    np.testing.assert_allclose(np.linalg.norm(found[:, 2, :2] - found[:, 1, :2], axis=1), 0.25)
    assert set(curtain.cell_node_count.values.tolist()) == {5}


def test_it_follows_a_bent_trace(curtain: xr.Dataset, line: Line) -> None:
    found = rings(curtain) - (EAST, NORTH, 0)
    on_first = np.isclose(found[..., 1], 0) & (found[..., 0] <= 9 + 1e-6)
    on_second = np.isclose(found[..., 0], 9) & (found[..., 1] >= -1e-6)
    assert np.all(on_first | on_second)
    assert on_first.any()
    assert on_second.any()
    # Along its lowest row it is as long as the section, margins of 2 m included.
    lowest = found[:, 1, 2] == found[..., 2].min()
    assert np.linalg.norm(found[lowest, 2, :2] - found[lowest, 1, :2], axis=1).sum() == pytest.approx(22)


def test_a_cell_has_the_mean_of_the_section_over_it(curtain: xr.Dataset) -> None:
    corners = rings(curtain)[:, :4] - (EAST, NORTH, 0)
    along = np.where(np.isclose(corners[..., 1], 0), corners[..., 0], 9 + corners[..., 1])
    # The mean over a rectangle of what is bilinear in it is that of its corners (no source).
    expected = slowness(along, corners[..., 2]).mean(axis=1)
    np.testing.assert_allclose(curtain.slowness, expected, rtol=1e-6)
    np.testing.assert_allclose(curtain.velocity * curtain.slowness, 1, rtol=1e-6)


def test_cells_without_ground_are_left_out(curtain: xr.Dataset, line: Line) -> None:
    values = line.picture["slowness"].to_numpy()
    full = np.isfinite(np.stack([values[:-1, :-1], values[1:, :-1], values[:-1, 1:], values[1:, 1:]]))
    assert curtain.sizes["cell"] == full.all(axis=0).sum() < full[0].size
    for name in ("slowness", "velocity", "slowness_noise_part", "slowness_total_error"):
        assert curtain[name].notnull().all()


def test_a_cell_is_as_reliable_as_its_worst_corner(line: Line) -> None:
    section = line.picture.copy(deep=True)
    section["slowness"][:] = 1e-3
    section["reliability"][:] = 0
    section["reliability"][20, 30] = 2
    made = curtain_dataset(section, unit(UTM)[0])
    assert np.count_nonzero(made.reliability == 2) == 4
    assert np.count_nonzero(made.reliability) == 4


def test_a_large_section_is_thinned_and_keeps_its_ends(line: Line, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(cells, "MOST", 500)
    made = cells.thinned(line.picture)
    assert made.sizes["elevation"] * made.sizes["distance"] < 600
    for name in ("elevation", "distance"):
        assert made[name][[0, -1]].values.tolist() == line.picture[name][[0, -1]].values.tolist()
        assert set(made[name].values) <= set(line.picture[name].values)


def test_the_curtain_is_laid_out_as_clients_read_it(curtain: xr.Dataset, tmp_path: Path) -> None:
    path = write_curtain(tmp_path, "bent", curtain)
    assert {p.name for p in tmp_path.iterdir()} == {"bent_curtain.nc", "bent_curtain.qml"}
    with netCDF4.Dataset(path) as file:
        container = file["cells"]
        assert (container.geometry_type, container.grid_mapping) == ("polygon", "crs")
        assert container.node_coordinates == "cell_x cell_y cell_z"
        for axis in "xyz":
            assert file[f"cell_{axis}"].axis == axis.upper()
            assert file[f"cell_{axis}"].filters()["zlib"]
        assert (file["cell_z"].standard_name, file["cell_z"].positive) == ("altitude", "up")
        for name in ("slowness", "velocity", "slowness_noise_part", "reliability"):
            assert (file[name].geometry, file[name].grid_mapping) == ("cells", "crs")
            assert file[name]._FillValue == (127 if name == "reliability" else -9999)
        for said in ("configuration", "input_sha256", "chosen_rule", "verdict", "order", "comment"):
            assert said in file.ncattrs()


def test_heights_are_in_the_crs_unit_for_drawing_in_space(result: Result) -> None:
    crs, metres = unit("EPSG:2263")
    made = curtain_dataset(make_line("bent", result, bent(result.axes[0]), "EPSG:2263").picture, crs)
    assert made.cell_z.attrs["units"] == made.cell_x.attrs["units"] == "US_survey_foot"
    np.testing.assert_allclose(made.cell_z.min() * metres, 34)


def test_the_style_colours_every_cell_in_plan_and_in_space(curtain: xr.Dataset, tmp_path: Path) -> None:
    path = write_curtain(tmp_path, "bent", curtain).with_suffix(".qml")
    root = ElementTree.fromstring(path.read_text(encoding="utf-8"))
    plan = root.find("renderer-v2")
    assert plan is not None
    assert (plan.get("type"), plan.get("attr")) == ("graduatedSymbol", "velocity")
    ranges = [(float(r.attrib["lower"]), float(r.attrib["upper"])) for r in plan.iter("range")]
    assert ranges[0][0] < float(curtain.velocity.min())
    assert ranges[-1][1] > float(curtain.velocity.max())
    assert [low for low, _ in ranges[1:]] == [high for _, high in ranges[:-1]]
    symbols = plan.find("symbols")
    assert symbols is not None
    assert [symbol.get("name") for symbol in symbols] == [r.get("symbol") for r in plan.iter("range")]
    space = root.find("renderer-3d")
    assert space is not None
    rules = [rule.attrib["filter"] for rule in space.iter("rule")]
    assert rules == [f'"velocity" >= {low:.6g} AND "velocity" < {high:.6g}' for low, high in ranges]
    for data in space.iter("data"):
        assert (data.get("alt-clamping"), data.get("culling-mode")) == ("absolute", "no-culling")
    colours = [material.get("diffuse") for material in space.iter("material")]
    assert len(set(colours)) == len(rules)


def test_points_are_the_nodes_in_the_ground_with_a_plain_header(line: Line, tmp_path: Path) -> None:
    path = write_points(tmp_path, "bent", points_table(line.picture, unit(UTM)[0]))
    # pandas, a general reader, with nothing told to it.
    table = pd.read_csv(path)
    assert list(table.columns) == ["x [m]", "y [m]", "z [m]", "velocity [m s-1]", "reliability"]
    assert len(table) == int(line.picture["velocity"].notnull().sum())
    assert set(table["reliability"]) <= {"reliable", "mesh_dependent", "poorly_covered"}
    x, y = table["x [m]"] - EAST, table["y [m]"] - NORTH
    along = np.where(y > 0, 9 + y, x)
    np.testing.assert_allclose(
        table["velocity [m s-1]"], 1 / slowness(along, table["z [m]"].to_numpy()), rtol=1e-5
    )


def test_points_are_in_the_crs_unit(result: Result) -> None:
    crs, metres = unit("EPSG:2263")
    table = points_table(make_line("bent", result, bent(result.axes[0]), "EPSG:2263").picture, crs)
    assert list(table.columns[:3]) == [f"{axis} [US_survey_foot]" for axis in "xyz"]
    assert table["z [US_survey_foot]"].min() * metres == pytest.approx(34)
