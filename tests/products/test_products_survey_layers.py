"""Laws of the survey's layers: everything where it stands, with what to click on."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import netCDF4
import numpy as np
import pandas as pd
import pytest
import xarray as xr

from stillground.products.boreholes import boreholes
from stillground.products.survey import survey_dataset, write_survey
from stillground.protocols import Result

from .crossing_lines import CENTRES, PROVENANCE, TOP, bent, crossing_lines, make_line, straight, unit
from .made_up_results import bent as curved

UTM = "EPSG:32631"
EAST, NORTH = CENTRES[UTM]


@pytest.fixture(scope="module")
def layers(result: Result) -> xr.Dataset:
    lines = [*crossing_lines(result, UTM), make_line("bent", result, bent(result.axes[0]), UTM)]
    return survey_dataset(lines, static_units="s", crs=unit(UTM)[0], provenance=PROVENANCE)


def nodes(layers: xr.Dataset, feature: str, i: int) -> np.ndarray:
    counts = layers[f"{feature}_node_count"].to_numpy()
    part = slice(counts[:i].sum(), counts[: i + 1].sum())
    names = [f"{feature}_{axis}" for axis in "xyz" if f"{feature}_{axis}" in layers]
    return np.column_stack([layers[name][part] for name in names])


def test_lines_run_from_the_first_position_to_the_last(layers: xr.Dataset) -> None:
    assert layers.line_profile.values.tolist() == ["ab", "cd", "ef", "bent"]
    for i, angle in enumerate((0, 50, 110)):
        line = nodes(layers, "line", i)
        ends = np.column_stack(straight(np.array([0.0, 18.0]), np.radians(angle), 9.0))
        np.testing.assert_allclose(line[[0, -1]], ends + np.array(CENTRES[UTM]), atol=1e-6)
    assert layers.line_length.values.tolist() == [18] * 4


def test_a_bent_line_keeps_its_corner_and_length(layers: xr.Dataset) -> None:
    line = nodes(layers, "line", 3)
    assert np.linalg.norm(np.diff(line, axis=0), axis=1).sum() == pytest.approx(18)
    assert np.linalg.norm(line - (EAST + 9, NORTH), axis=1).min() < 1e-6


def test_lines_carry_the_argument_for_their_answer(layers: xr.Dataset) -> None:
    first = layers.isel(line=0)
    assert (first.line_verdict, first.line_rule, first.line_order) == ("settled", "gcv", 2.0)
    assert float(first.line_iteration) == 9


def test_the_misfit_of_a_line_is_the_answers_own_where_that_was_recomputed(result: Result) -> None:
    trace = straight(result.axes[0], 0.0, 9.0)
    lines = [make_line("ab", result, trace, None), make_line("cd", curved(result, 2.99), trace, None)]
    made = survey_dataset(lines, static_units="s", crs=None, provenance=PROVENANCE)
    np.testing.assert_allclose(made.line_misfit, [result.chosen.chi_square, 2.99], rtol=1e-6)


def test_bent_rays_are_lines_in_space_with_row_and_residual(result: Result) -> None:
    line = make_line("ab", result, straight(result.axes[0], 0.0, 9.0), UTM)
    rays = (
        np.array([[0.0, TOP], [9.0, TOP - 4], [18.0, TOP]]),
        np.empty((0, 2)),
        np.array([[3.0, 1], [4, 2]]),
    )
    fit = pd.DataFrame({"row": [2, 3, 5], "residual_over_error": [0.5, 0.0, -1.5]})
    lines = [replace(line, rays=rays, fit=fit), make_line("cd", result, bent(result.axes[0]), UTM)]
    layers = survey_dataset(lines, static_units="s", crs=unit(UTM)[0], provenance=PROVENANCE)
    assert layers.ray_row.values.tolist() == [2, 5]  # one was not found
    assert layers.ray_residual.values.tolist() == [0.5, -1.5]
    east, north = (np.array(along) for along in straight(np.array([0.0, 9.0, 18.0]), 0.0, 9.0))
    expected = np.column_stack([EAST + east, NORTH + north, [TOP, TOP - 4, TOP]])
    np.testing.assert_allclose(nodes(layers, "ray", 0), expected, atol=1e-6)


def test_an_order_that_cannot_be_told_is_missing(result: Result, tmp_path: Path) -> None:
    line = make_line("ab", result, straight(result.axes[0], 0.0, 9.0), UTM)
    section = line.picture.assign_attrs()
    section.attrs.pop("order")
    made = survey_dataset([replace(line, picture=section)], static_units="s", crs=None, provenance=PROVENANCE)
    with netCDF4.Dataset(write_survey(tmp_path, made)) as file:
        file.set_auto_mask(False)
        assert file["line_order"][:].tolist() == [-9999]


def test_stations_stand_at_their_positions_with_their_misfit(layers: xr.Dataset) -> None:
    assert layers.sizes["station"] == 4 * 50
    station = layers.isel(station=26)
    assert [str(station[f"station_{f}"].item()) for f in ("profile", "name")] == ["ab", "receiver 2"]
    np.testing.assert_allclose([station.station_x, station.station_y], [EAST + 9, NORTH])
    assert float(station.station_z) == 60.0
    assert float(station.station_residual) == pytest.approx(-1 + 2 * 26 / 49)
    assert np.isnan(station.station_static)
    assert float(layers.station_static[0]) == pytest.approx(-1e-4)
    assert layers.station_static.attrs["units"] == "s"


def test_positions_below_one_another_are_boreholes_from_the_top_down(layers: xr.Dataset) -> None:
    assert layers.borehole_profile.values.tolist() == np.repeat(["ab", "cd", "ef", "bent"], 2).tolist()
    hole = nodes(layers, "borehole", 0)
    assert hole.shape == (25, 3)
    assert hole[0, 2] == 61
    assert np.all(np.diff(hole[:, 2]) < 0)
    assert float(layers.borehole_length[0]) == pytest.approx(24)


def test_a_line_over_a_slope_is_no_borehole() -> None:
    along = np.arange(0.0, 40.0)
    slope = np.column_stack([along, np.zeros(40), 100 - along])
    assert boreholes(slope) == ()


def test_holes_out_of_plumb_and_close_together_are_told_apart() -> None:
    # 10 degrees off plumb; the second hole 4 m away with half the spacing and deeper.
    first = np.column_stack([0.18 * np.arange(25), np.zeros(25), -np.arange(25.0)])
    second = np.column_stack([np.full(60, -4.0), np.zeros(60), -0.5 * np.arange(60.0)])
    found = boreholes(np.vstack([first, second]))
    assert sorted(hole.tolist() for hole in found) == [[*range(25)], [*range(25, 85)]]


def test_a_place_that_is_source_and_receiver_is_one_position_of_a_borehole(result: Result) -> None:
    line = make_line("ab", result, straight(result.axes[0], 0.0, 9.0), UTM)
    twice = line.stations.assign(x=EAST, y=NORTH)
    made = survey_dataset(
        [replace(line, stations=twice)], static_units="s", crs=unit(UTM)[0], provenance=PROVENANCE
    )
    assert made.borehole_positions.values.tolist() == [25]
    assert made.sizes["station"] == 50


def test_a_column_has_no_line_but_a_borehole(result: Result) -> None:
    line = make_line("ab", result, straight(result.axes[0], 0.0, 9.0), UTM)
    column = replace(line, picture=line.picture.isel(distance=8), stations=line.stations[:25])
    made = survey_dataset([column], static_units="s", crs=unit(UTM)[0], provenance=PROVENANCE)
    assert "lines" not in made
    assert made.borehole_positions.values.tolist() == [25]
    # CF-1.8, 5.6: a grid mapping asks for exactly one variable of each of these names.
    for name in ("projection_x_coordinate", "projection_y_coordinate"):
        assert [v.attrs.get("standard_name") for v in made.variables.values()].count(name) == 1


def test_coordinates_and_heights_are_in_the_crs_unit(result: Result) -> None:
    crs, metres = unit("EPSG:2263")
    made = survey_dataset(
        crossing_lines(result, "EPSG:2263"), static_units="s", crs=crs, provenance=PROVENANCE
    )
    for name in ("line_x", "station_z", "borehole_z"):
        assert made[name].attrs["units"] == "US_survey_foot"
    assert float(made.station_z[0]) * metres == pytest.approx(61)
    assert float(
        np.hypot(made.station_x[0] - 980_000, made.station_y[0] - 200_000)
    ) * metres == pytest.approx(9)
    assert float(made.borehole_length[0]) == pytest.approx(24), "lengths stay in m"
    assert made.attrs["geospatial_vertical_units"] == "US_survey_foot"


def test_every_layer_is_laid_out_as_clients_read_it(layers: xr.Dataset, tmp_path: Path) -> None:
    with netCDF4.Dataset(write_survey(tmp_path, layers)) as file:
        for feature, kind, axes in (
            ("line", "line", "xy"),
            ("station", "point", "xyz"),
            ("borehole", "line", "xyz"),
        ):
            container = file[f"{feature}s"]
            assert (container.geometry_type, container.grid_mapping) == (kind, "crs")
            assert container.node_coordinates == " ".join(f"{feature}_{axis}" for axis in axes)
            assert ("node_count" in container.ncattrs()) is (kind == "line")
            for axis in axes:
                node = file[f"{feature}_{axis}"]
                assert node.axis == axis.upper()
                assert node.dtype == np.float64
                # One layer of a file may have the standard names.
                named = "standard_name" in node.ncattrs()
                assert named is (feature == "line" or axis == "z")
            fields = [v for v in file.variables.values() if getattr(v, "geometry", "") == f"{feature}s"]
            assert len(fields) >= 3
            for field in fields:
                assert field.grid_mapping == "crs"
                assert field.dimensions == (feature,)
                if field.dtype == np.float32:
                    assert field._FillValue == -9999
