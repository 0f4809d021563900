"""Laws of the map: values of the lines, nothing off them, between the two where lines cross."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import netCDF4
import numpy as np
import pytest
import xarray as xr
from scipy.spatial import KDTree

from stillground.products.line import Line
from stillground.products.map import Slicing, map_dataset, write_map
from stillground.protocols import Result

from .crossing_lines import CENTRES, PROVENANCE, bent, crossing_lines, make_line, straight, unit
from .made_up_results import SURFACE, TOP, slowness

UTM = "EPSG:32631"
EAST, NORTH = CENTRES[UTM]
SLICING = Slicing(spacing=0.5, levels=(2.0, 8.0, 20.0), reach=3.0)
# Half of the last bit of an answer's mantissa of 11 bits.
ROUNDED = 2.0**-11


def build(lines: list[Line], slicing: Slicing = SLICING, code: str | None = UTM) -> xr.Dataset:
    return map_dataset(lines, slicing, crs=unit(code)[0], provenance=PROVENANCE)


@pytest.fixture(scope="module")
def lines(result: Result) -> list[Line]:
    return crossing_lines(result, UTM)


@pytest.fixture(scope="module")
def crossing(lines: list[Line]) -> xr.Dataset:
    return build(lines)


@pytest.fixture(scope="module")
def alone(result: Result) -> Line:
    """Eastwards, distance 9 at the centre."""
    return make_line("ab", result, straight(result.axes[0], 0.0, 9.0), UTM)


def distances(places: np.ndarray, lines: list[Line]) -> np.ndarray:
    """From places (n, 2) to the nearest line between its outermost positions, by dense points on it."""
    points = []
    for line in lines:
        along = np.linspace(line.first, line.last, 4000)
        points.append(np.column_stack([np.interp(along, line.picture["distance"], t) for t in line.trace.T]))
    return np.asarray(KDTree(np.vstack(points)).query(places)[0])


def test_on_a_line_alone_the_map_has_its_values_at_the_depth(alone: Line) -> None:
    made = build([alone])
    for along in (-6.0, 0.0, 4.5):
        for depth in SLICING.levels:
            # The closed form of the made-up ground, at the depth below the surface there.
            elevation = np.interp(along + 9, *SURFACE) - depth
            expected = slowness(np.array(along + 9), np.array(elevation))
            for beside in (0.0, 1.5, -2.5):
                found = made.slowness.sel(depth=depth, x=EAST + along, y=NORTH + beside)
                # Linear between rows a quarter of a metre apart: some 1e-4 in the lens.
                assert float(found) == pytest.approx(expected, rel=ROUNDED + 5e-4)
                velocity = made.velocity.sel(depth=depth, x=EAST + along, y=NORTH + beside)
                assert float(velocity * found) == pytest.approx(1, rel=2 * ROUNDED)


def test_without_a_surface_depth_counts_from_the_highest_position(result: Result) -> None:
    line = make_line("ab", result, straight(result.axes[0], 0.0, 9.0), UTM, surface=None)
    found = build([line]).slowness.sel(depth=8.0, x=EAST, y=NORTH)
    expected = slowness(np.array(9.0), np.array(TOP - 8.0))
    assert float(found) == pytest.approx(expected, rel=ROUNDED + 1e-5)


def test_the_ground_is_shown_right_up_to_its_surface(alone: Line) -> None:
    # The surface lies between rows of nodes nearly everywhere: the uppermost row in the ground stands in.
    made = build([alone], replace(SLICING, levels=(0.0,))).slowness.isel(depth=0).sel(y=NORTH)
    along = made.x - EAST + 9
    shown = made[(along >= 0) & (along <= 18)]
    assert shown.notnull().all()
    expected = slowness(np.arange(0, 18.5, 0.5), np.interp(np.arange(0, 18.5, 0.5), *SURFACE))
    np.testing.assert_allclose(shown, expected, rtol=0.01)


def test_slices_may_be_cut_at_elevations(alone: Line) -> None:
    made = build([alone], replace(SLICING, levels=(62.75, 50.0), elevations=True))
    assert made.slowness.dims == ("elevation", "y", "x")
    found = made.slowness.sel(elevation=50.0, x=EAST, y=NORTH)
    assert float(found) == pytest.approx(slowness(np.array(9.0), np.array(50.0)), rel=ROUNDED + 1e-5)
    # The surface of the made-up ground rises above 62.75 m from distance 2.5 to 11.2 only.
    shown = made.slowness.sel(elevation=62.75, y=NORTH).notnull()
    along = made.x - EAST + 9
    np.testing.assert_array_equal(shown[(along > 3) & (along < 11)], True)
    np.testing.assert_array_equal(shown[(along < 2) | (along > 12)], False)


def test_nothing_is_shown_farther_from_a_line_than_the_reach(crossing: xr.Dataset, lines: list[Line]) -> None:
    east, north = np.meshgrid(crossing.x, crossing.y)
    away = distances(np.column_stack([east.ravel(), north.ravel()]), lines).reshape(east.shape)
    shown = crossing.slowness.notnull().any("depth").to_numpy()
    assert away[shown].max() <= SLICING.reach + 1e-6
    # Beside the line all is shown; at its ends nothing is made up beyond the section.
    east_of_centre = [straight(np.array([12.0, 16.0]), np.radians(angle), 9.0) for angle in (0, 50, 110)]
    for xs, ys in east_of_centre:
        for x, y in zip(xs, ys, strict=True):
            assert crossing.slowness.sel(x=EAST + x, y=NORTH + y, method="nearest").notnull().all()


def test_where_lines_cross_the_value_lies_between_theirs(result: Result) -> None:
    low, high = (replace(result, model=f * result.model) for f in (0.85, 1.2))
    pair = [
        make_line("ab", low, straight(result.axes[0], 0.0, 9.0), UTM),
        make_line("cd", high, straight(result.axes[0], np.pi / 2, 9.0), UTM),
    ]
    both = build(pair).slowness
    apart = [build([line]).slowness.interp_like(both, "nearest") for line in pair]
    at = {"x": EAST, "y": NORTH}
    # On both lines alike: the mean.
    np.testing.assert_allclose(both.sel(at), (apart[0].sel(at) + apart[1].sel(at)) / 2, rtol=2 * ROUNDED)
    shared = apart[0].notnull() & apart[1].notnull()
    assert int(shared.sum()) > 300
    between = (both > apart[0] * (1 - ROUNDED)) & (both < apart[1] * (1 + ROUNDED))
    assert bool(between.where(shared, True).all())
    # On a line and a good way off the other its own values prevail.
    there = {"x": EAST + 2.5, "y": NORTH}
    np.testing.assert_allclose(both.sel(there), apart[0].sel(there), rtol=0.01)


def test_the_flag_is_that_of_the_nearest_line(result: Result) -> None:
    bare = replace(result, coverage=replace(result.coverage, values=np.zeros_like(result.model)))
    sound = replace(
        result,
        coverage=replace(result.coverage, values=np.ones_like(result.model)),
        mesh_change=np.zeros_like(result.model),
        rehearsal=None,
    )
    pair = [
        make_line("ab", sound, straight(result.axes[0], 0.0, 9.0), UTM),
        make_line("cd", replace(bare, rehearsal=None), straight(result.axes[0], np.pi / 2, 9.0), UTM),
    ]
    flags = build(pair).reliability.sel(depth=8.0)
    assert flags.sel(x=EAST + 2, y=NORTH + 1) == 0
    assert flags.sel(x=EAST + 1, y=NORTH + 2) == 2


def test_flags_are_missing_where_values_are(crossing: xr.Dataset) -> None:
    np.testing.assert_array_equal(crossing.reliability == 127, crossing.slowness.isnull())
    assert crossing.slowness.isnull().any()


def test_below_a_section_there_is_nothing(alone: Line) -> None:
    # The section ends at elevation 34, some 29 m below the surface.
    made = build([alone], replace(SLICING, levels=(10.0, 28.0, 30.0))).slowness.sel(x=EAST, y=NORTH)
    assert made.notnull().values.tolist() == [True, True, False]


def test_a_bent_line_is_followed(result: Result) -> None:
    line = make_line("bent", result, bent(result.axes[0]), UTM, surface=None)
    made = build([line]).slowness.sel(depth=8.0)
    for x, y, along in ((4.0, 0.0, 4.0), (9.0, 6.0, 15.0), (4.0, -2.0, 4.0), (11.0, 6.0, 15.0)):
        expected = slowness(np.array(along), np.array(TOP - 8))
        assert float(made.sel(x=EAST + x, y=NORTH + y)) == pytest.approx(expected, rel=ROUNDED + 1e-5)
    assert made.sel(x=EAST + 4, y=NORTH + 6).isnull()


def test_a_column_is_shown_within_reach_of_its_place(alone: Line) -> None:
    column = replace(alone, picture=alone.picture.isel(distance=44).drop_vars("surface_altitude"))
    made = build([column]).slowness.sel(depth=8.0)
    there = column.picture["slowness"].sel(elevation=TOP - 8)
    east, north = column.trace[0]
    assert float(made.sel(x=east, y=north)) == pytest.approx(float(there), rel=ROUNDED)
    away = np.hypot(made.x - east, made.y - north)
    np.testing.assert_array_equal(made.notnull(), (away < SLICING.reach).transpose("y", "x"))


def test_the_file_is_laid_out_as_clients_read_it(crossing: xr.Dataset, tmp_path: Path) -> None:
    paths = write_map(tmp_path, crossing)
    layers = ["slowness", "velocity", "slowness_noise_part", "slowness_total_error", "reliability"]
    assert [path.name for path in paths] == ["map.nc", *(f"map_{layer}.nc" for layer in layers)]
    for path, here in zip(paths, [layers, *([layer] for layer in layers)], strict=True):
        with netCDF4.Dataset(path) as file:
            file.set_auto_mask(False)
            assert not file.groups
            assert [name for name, variable in file.variables.items() if variable.ndim > 1] == here
            for name in here:
                variable = file[name]
                assert variable.dimensions == ("depth", "y", "x")
                assert variable.chunking() == [1, *variable.shape[1:]]
                assert variable.grid_mapping == "crs"
                filters = variable.filters()
                assert (filters["zlib"], filters["shuffle"], filters["complevel"]) == (True, True, 4)
                if name == "reliability":
                    assert (variable.dtype, variable._FillValue) == (np.int8, 127)
                    assert variable.flag_meanings == "reliable mesh_dependent poorly_covered"
                else:
                    assert variable.dtype == np.float32
                    assert np.isnan(variable._FillValue)
            assert (file["depth"].positive, file["depth"].axis) == ("down", "Z")
            for name, axis in (("x", "X"), ("y", "Y")):
                assert file[name].standard_name == f"projection_{name}_coordinate"
                assert file[name].axis == axis
                assert file[name].dtype == np.float64
                assert "_FillValue" not in file[name].ncattrs()
                assert np.ptp(np.diff(file[name][:])) < 1e-9
            assert np.all(np.diff(file["y"][:]) < 0)
            west, north = file["x"][0] - 0.25, file["y"][0] + 0.25
            assert file["crs"].GeoTransform == f"{west:.15g} 0.5 0 {north:.15g} 0 -0.5"
            assert file["depth_top"][:].tolist() == [0, 5, 14]
            assert file["depth_bottom"][:].tolist() == [5, 14, 26]
    assert crossing.slowness.attrs["ancillary_variables"] == " ".join(layers[2:])


def test_nodes_are_whole_multiples_of_the_spacing_in_the_crs_unit(result: Result) -> None:
    metres = unit("EPSG:2263")[1]
    made = build(crossing_lines(result, "EPSG:2263"), replace(SLICING, spacing=2 * metres), "EPSG:2263")
    assert made.x.attrs["units"] == "US_survey_foot"
    np.testing.assert_allclose(made.x / 2, np.rint(made.x / 2), atol=1e-6)
    shown = made.slowness.notnull().any("depth")
    away = np.hypot(made.x - 980_000, made.y - 200_000).where(shown).max() * metres
    # To the corner of section and reach: the hypotenuse of half a line with its share, in m.
    assert 9 < away < 9 + SLICING.reach


def test_it_says_of_each_profile_what_argues_it(crossing: xr.Dataset) -> None:
    assert crossing.attrs["profiles"].splitlines() == [
        f"{name}: settled, order 2; gcv stops at iteration 9" for name in ("ab", "cd", "ef")
    ]
    assert crossing.attrs["configuration"] == PROVENANCE.config_text
    assert crossing.attrs["geospatial_vertical_positive"] == "down"
    assert 1.9 < crossing.attrs["geospatial_lon_min"] < 2.1
