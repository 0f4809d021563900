"""Laws of the section: what stands where, what is called unreliable, and how the file is laid out."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from typing import Any

import netCDF4
import numpy as np
import pytest
import xarray as xr
from pyproj import CRS

from stillground.errors import OutputError
from stillground.products.picture import picture_dataset, write_picture
from stillground.products.provenance import CAUTION, Provenance
from stillground.products.raster import ground
from stillground.products.reliability import reliability
from stillground.protocols import Result

from .made_up_results import slowness

Section = Callable[..., xr.Dataset]

QUALITIES = (
    "path_density",
    "mesh_change",
    "slowness_noise_part",
    "slowness_total_error",
    "resolved_fraction",
    "length_spread",
    "investigation_index",
)


@pytest.fixture
def section(result: Result, surface: Any, crs: CRS, provenance: Provenance) -> Section:
    def build(**changed: Any) -> xr.Dataset:
        answer = changed.pop("result", result)
        arguments: dict[str, Any] = {
            "easting": 430_000 + 0.8 * answer.axes[0],
            "northing": 5_700_000 + 0.6 * answer.axes[0],
            "crs": crs,
            "surface": surface,
            "tolerance": 0.02,
            "provenance": provenance,
        }
        return picture_dataset("crosshole-ab", answer, **(arguments | changed))

    return build


def test_the_value_at_a_place_is_the_fields_there(section: Section) -> None:
    made = section()
    assert made.slowness.dims == ("elevation", "distance")
    assert np.all(np.diff(made.elevation) < 0)
    for distance, elevation in ((5.5, 53.0), (12.5, 44.5), (-2.0, 34.0), (20.0, 60.0)):
        value = made.slowness.sel(distance=distance, elevation=elevation)
        expected = slowness(np.array(distance), np.array(elevation))
        np.testing.assert_allclose(value, expected, rtol=1e-6)


def test_velocity_is_one_over_slowness(section: Section) -> None:
    made = section(surface=None)
    np.testing.assert_allclose(made.velocity * made.slowness, 1, rtol=1e-6)
    assert made.velocity.attrs["units"] == "m s-1"


def test_a_property_without_a_reciprocal_has_none(section: Section, result: Result) -> None:
    plain = replace(result, property=replace(result.property, reciprocal=None))
    assert "velocity" not in section(result=plain)


def test_above_the_surface_there_is_no_data(section: Section) -> None:
    made = section()
    above = made.elevation > made.surface_altitude
    assert above.any()
    for name in ("slowness", "velocity", *QUALITIES):
        np.testing.assert_array_equal(made[name].isnull(), above)
    np.testing.assert_array_equal(made.reliability == 127, above)


def test_the_surface_is_linear_between_its_points_and_constant_beyond(section: Section) -> None:
    made = section(surface=(np.array([0.0, 10.0]), np.array([60.0, 62.0])))
    at = made.surface_altitude
    np.testing.assert_allclose(at.sel(distance=[-2.0, 0.0, 5.0, 10.0, 20.0]), [60, 60, 61, 62, 62])
    # A node on the surface belongs to the ground.
    assert made.slowness.sel(distance=5.0, elevation=61.0).notnull()
    assert made.slowness.sel(distance=5.0, elevation=61.25).isnull()


def test_without_a_surface_all_nodes_are_ground(section: Section) -> None:
    made = section(surface=None)
    assert made.slowness.notnull().all()
    assert "surface_altitude" not in made


def test_flags_follow_their_words_and_poor_coverage_wins(result: Result) -> None:
    coverage = np.full_like(result.model, 100.0)
    moved = np.zeros_like(result.model)
    coverage[0, :4] = [4.9, 5.1, 0.0, 4.9]
    limit = 0.02 * result.anomaly
    moved[0, 1], moved[0, 3], moved[5, 5], moved[5, 6] = limit * 1.01, limit * 9, limit * 1.01, limit * 0.99
    made = replace(result, coverage=replace(result.coverage, values=coverage), mesh_change=moved)
    flags = reliability(made, 0.02, ground(made.axes, None))
    assert flags[0, :4].tolist() == [2, 1, 2, 2]
    assert flags[5, 5:7].tolist() == [1, 0]
    assert np.count_nonzero(flags) == 5


def test_the_median_is_of_positive_coverage_in_the_ground_only(result: Result) -> None:
    inside = np.zeros(result.model.shape, dtype=bool)
    inside[0, :5] = True
    coverage = np.full_like(result.model, 1e6)
    coverage[0, :5] = [0.0, 0.0, 10.0, 10.0, 0.6]
    made = replace(result, coverage=replace(result.coverage, values=coverage))
    assert reliability(made, np.inf, inside)[0, :6].tolist() == [2, 2, 0, 0, 0, 127]


def test_ground_that_nothing_crosses_is_poorly_covered(result: Result) -> None:
    bare = replace(result, coverage=replace(result.coverage, values=np.zeros_like(result.model)))
    assert np.all(reliability(bare, 0.02, ground(bare.axes, None)) == 2)


def test_ground_of_which_nothing_comes_back_is_poorly_covered(result: Result) -> None:
    assert result.rehearsal is not None
    sound = replace(
        result,
        coverage=replace(result.coverage, values=np.ones_like(result.model)),
        mesh_change=np.zeros_like(result.model),
    )
    resolved = np.ones_like(result.model)
    resolved[0, :4] = [0.099, 0.101, -0.3, np.nan]
    made = replace(sound, rehearsal=replace(result.rehearsal, resolved=resolved))
    inside = ground(made.axes, None)
    assert reliability(made, 0.02, inside)[0, :4].tolist() == [2, 0, 2, 2]
    assert not reliability(replace(sound, rehearsal=None), 0.02, inside).any()


def test_the_flags_say_by_which_limits_they_were_given(
    make: Callable[..., Result], section: Section, result: Result
) -> None:
    assert "or resolved_fraction under 0.1" in section().reliability.attrs["comment"]
    bare = section(result=replace(result, rehearsal=None)).reliability.attrs["comment"]
    assert "resolved_fraction" not in bare
    assert "not rehearsed" in bare


def test_error_bars_say_what_they_are_and_what_not(section: Section, result: Result) -> None:
    made = section(surface=None)
    assert result.rehearsal is not None
    assert result.sensitivity is not None
    for name, values, units, words in (
        ("slowness_noise_part", result.noise_part, "s m-1", ("not the error", "prior that the user chose")),
        (
            "slowness_total_error",
            result.rehearsal.total_error,
            "s m-1",
            ("drawn from the prior", "not on this one", "prior that the user chose"),
        ),
        ("resolved_fraction", result.rehearsal.resolved, "1", ("no length of resolution",)),
        ("length_spread", result.sensitivity.spread, "s m-1", ("not the error",)),
        ("investigation_index", result.sensitivity.investigation, "1", ("Oldenburg and Li 1999",)),
    ):
        np.testing.assert_allclose(made[name], values.T[::-1], rtol=1e-6)
        assert made[name].attrs["units"] == units
        assert all(word in made[name].attrs["comment"] for word in words), name
        assert "long_name" in made[name].attrs


def test_what_was_not_asked_for_is_left_out(section: Section, result: Result) -> None:
    made = section(result=replace(result, rehearsal=None, sensitivity=None))
    assert "slowness_noise_part" in made
    assert not {"slowness_total_error", "resolved_fraction", "length_spread"} & set(made)
    named = "path_density mesh_change slowness_noise_part reliability"
    assert made.slowness.attrs["ancillary_variables"] == named


def test_one_rung_says_nothing_of_the_mesh(make: Callable[..., Result], section: Section) -> None:
    made = section(result=make(levels=1, word="undecided"))
    assert not (made.reliability == 1).any()
    assert "not judged where there is one rung only" in made.reliability.attrs["comment"]


def test_the_file_is_laid_out_as_the_recipe_says(section: Section, tmp_path: Path) -> None:
    path = write_picture(tmp_path, "crosshole-ab", section())
    assert path.name == "crosshole-ab_section.nc"
    with netCDF4.Dataset(path) as file:
        file.set_auto_mask(False)
        assert not file.groups
        assert file.comment.startswith(CAUTION)
        for name in ("slowness", "velocity", *QUALITIES):
            variable = file[name]
            assert variable.dimensions == ("elevation", "distance")
            assert variable.dtype == np.float32
            assert np.isnan(variable._FillValue)
            assert variable.filters()["zlib"]
            assert variable.filters()["shuffle"]
            assert variable.filters()["complevel"] == 4
            assert variable.chunking() == list(variable.shape)
            assert variable.grid_mapping == "section_crs"
            assert variable.coordinates == "easting northing"
        assert file["slowness"].ancillary_variables == f"{' '.join(QUALITIES)} reliability"
        assert file["slowness"].coverage_content_type == "modelResult"
        for name in QUALITIES:
            assert file[name].coverage_content_type == "qualityInformation"
        flags = file["reliability"]
        assert flags.dtype == np.int8
        assert flags._FillValue == 127
        assert flags.flag_values.dtype == np.int8
        assert flags.flag_values.tolist() == [0, 1, 2]
        assert flags.flag_meanings == "reliable mesh_dependent poorly_covered"
        for name in ("elevation", "distance", "easting", "northing"):
            assert file[name].dtype == np.float64
            assert "_FillValue" not in file[name].ncattrs()
        assert "axis" not in file["distance"].ncattrs()
        assert file["elevation"].axis == "Z"
        for name in ("crs", "section_crs"):
            assert file[name].shape == ()
            assert file[name].dtype == np.int32
        assert "coordinates" not in file["surface_altitude"].ncattrs()
        # Outer edges of the first nodes at distance -2 and elevation 64, a quarter of a metre apart.
        assert file["section_crs"].GeoTransform == "-2.125 0.25 0 64.125 0 -0.25"


def test_the_crs_is_ascii_and_still_itself(section: Section, crs: CRS) -> None:
    made = section()
    assert "°" in crs.to_wkt()
    for name in ("crs", "section_crs"):
        assert made[name].attrs["crs_wkt"].isascii()
        assert CRS.from_wkt(made[name].attrs["crs_wkt"]).to_epsg() == 32631
    assert made.section_crs.attrs["spatial_ref"].startswith("ENGCRS")
    # The library's own reader of CF attributes, without the text: the table says the same.
    from_table = CRS.from_cf({name: value for name, value in made.crs.attrs.items() if "wkt" not in name})
    assert from_table.coordinate_operation.method_name == "Transverse Mercator"
    assert from_table.coordinate_operation.params[1].value == 3.0


def test_easting_and_northing_are_in_the_crs_unit(section: Section) -> None:
    made = section(crs=CRS("EPSG:2263"))
    assert made.easting.attrs["units"] == "US_survey_foot"
    assert made.northing.attrs["standard_name"] == "projection_y_coordinate"
    assert made.distance.attrs["units"] == made.elevation.attrs["units"] == "m"


def test_a_vertical_datum_is_named_and_the_crs_stays_horizontal(section: Section) -> None:
    made = section(crs=CRS("EPSG:27700+5701"))
    assert CRS.from_wkt(made.crs.attrs["crs_wkt"]).to_epsg() == 27700
    assert made.crs.attrs["geopotential_datum_name"] == "Ordnance Datum Newlyn"


def test_a_local_frame_says_so_and_claims_no_place(section: Section) -> None:
    made = section(crs=None)
    assert made.crs.attrs["long_name"].startswith("local frame")
    for name in ("easting", "northing"):
        assert "standard_name" not in made[name].attrs
        assert made[name].attrs["units"] == "m"
    assert not any("lat" in name or "lon" in name for name in made.attrs if name.startswith("geospatial"))


def test_bounds_are_those_of_the_trace(section: Section) -> None:
    said = section().attrs
    # EPSG:32631 has its central meridian, 3 degrees east, at 500 000 m.
    assert 1.9 < said["geospatial_lon_min"] < said["geospatial_lon_max"] < 3
    assert 51.4 < said["geospatial_lat_min"] < 51.5
    assert (said["geospatial_vertical_min"], said["geospatial_vertical_max"]) == (34, 64)


def test_places_that_the_crs_cannot_hold_have_no_bounds(section: Section, result: Result) -> None:
    far = section(easting=1e12 + result.axes[0], northing=result.axes[0])
    assert "geospatial_lon_min" not in far.attrs
    assert "geospatial_vertical_min" in far.attrs


def test_a_place_that_cannot_be_written_leaves_no_half_file(section: Section, tmp_path: Path) -> None:
    (tmp_path / "results").write_text("")
    with pytest.raises(OutputError, match=r"crosshole-ab_section\.nc"):
        write_picture(tmp_path / "results", "crosshole-ab", section())
    assert [path.name for path in tmp_path.iterdir()] == ["results"]
