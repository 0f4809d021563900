"""Other people's programs open the files of a whole run: the compliance checker, and GDAL old and new."""

from __future__ import annotations

import json
import re
import shutil
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
import rasterio
import xarray as xr

from stillground.products.curtain import curtain_dataset, write_curtain
from stillground.products.map import Slicing, map_dataset, write_map
from stillground.products.survey import survey_dataset, write_survey
from stillground.protocols import Result

from .crossing_lines import CENTRES, PROVENANCE, bent, crossing_lines, make_line, unit

# What EPSG calls the horizontal system of each.
EPSG = {"EPSG:32631": 32631, "EPSG:27700+5701": 27700, "EPSG:32756": 32756, "EPSG:2263": 2263, None: None}


@pytest.fixture(scope="module")
def folders(make: Callable[..., Result], tmp_path_factory: pytest.TempPathFactory) -> dict[str | None, Path]:
    """Three crossing lines and the curtain of a bent one, in five coordinate systems."""
    # The checker takes a minute for the cells of a section as fine as the demo's.
    result = make(spacing=2.0)
    made = {}
    for code in CENTRES:
        folder = tmp_path_factory.mktemp("clients")
        crs, _ = unit(code)
        lines = crossing_lines(result, code)
        slicing = Slicing(spacing=0.5, levels=(2.0, 8.0, 20.0), reach=3.0)
        write_map(folder, map_dataset(lines, slicing, crs=crs, provenance=PROVENANCE))
        write_survey(folder, survey_dataset(lines, static_units="s", crs=crs, provenance=PROVENANCE))
        section = make_line("bent", result, bent(result.axes[0]), code).picture
        write_curtain(folder, "bent", curtain_dataset(section, crs))
        made[code] = folder
    return made


def run(*command: str) -> str:
    if shutil.which(command[0]) is None:
        pytest.skip(f"{Path(command[0]).name} is not installed (Debian package gdal-bin)")
    done = subprocess.run(command, capture_output=True, text=True, check=False, timeout=60)
    assert done.returncode == 0, done.stdout + done.stderr
    return done.stdout


@pytest.mark.parametrize(
    ("criteria", "codes", "names"),
    [
        ("normal", ("EPSG:32631", "EPSG:2263", None), ("map.nc", "map_velocity.nc", "map_reliability.nc")),
        ("lenient", ("EPSG:32631", None), ("survey.nc", "bent_curtain.nc")),
    ],
)
def test_the_compliance_checker_passes(
    folders: dict[str | None, Path], criteria: str, codes: tuple[str | None, ...], names: tuple[str, ...]
) -> None:
    files = [str(folders[code] / name) for code in codes for name in names]
    checker = str(Path(sys.executable).with_name("compliance-checker"))
    said = run(checker, "-t", "cf:1.8", "-c", criteria, *files)
    assert said.count("All tests passed!") == len(files)


@pytest.mark.parametrize("code", CENTRES)
def test_gdalinfo_sees_size_bands_place_and_crs(folders: dict[str | None, Path], code: str | None) -> None:
    path = folders[code] / "map.nc"
    with xr.open_dataset(path, engine="netcdf4") as made:
        x, y, shape = made.x.to_numpy(), made.y.to_numpy(), made.slowness.shape
    said = json.loads(run("gdalinfo", "-json", f"NETCDF:{path}:slowness"))
    assert said["size"] == [shape[2], shape[1]]
    assert len(said["bands"]) == 3
    assert {str(band["noDataValue"]).lower() for band in said["bands"]} == {"nan"}
    step = x[1] - x[0]
    corner = [x[0] - step / 2, step, 0, y[0] + step / 2, 0, -step]
    np.testing.assert_allclose(said["geoTransform"], corner, rtol=1e-12, atol=1e-9)
    if code is None:
        assert "coordinateSystem" not in said
    else:
        assert said["coordinateSystem"]["wkt"].rstrip("]").endswith(f'"EPSG",{EPSG[code]}')


@pytest.mark.parametrize("code", CENTRES)
def test_gdallocationinfo_finds_the_values_on_the_lines_and_none_off_them(
    folders: dict[str | None, Path], code: str | None
) -> None:
    path, metres, (east, north) = folders[code] / "map.nc", unit(code)[1], CENTRES[code]
    places = [(0.0, 0.0), (4.1, 0.1), (-3.2, -3.9)]
    off = (8.0, -6.0)
    with xr.open_dataset(path, engine="netcdf4") as made:
        for dx, dy in (*places, off):
            x, y = east + dx / metres, north + dy / metres
            for band in (1, 3):
                found = run(
                    "gdallocationinfo", "-valonly", "-geoloc", "-b", str(band),
                    f"NETCDF:{path}:velocity", f"{x:.3f}", f"{y:.3f}",
                )  # fmt: skip
                expected = float(made.velocity[band - 1].sel(x=x, y=y, method="nearest"))
                assert np.isnan(expected) == ((dx, dy) == off)
                np.testing.assert_allclose(float(found), expected, rtol=1e-6)


@pytest.mark.parametrize("code", ["EPSG:32631", "EPSG:2263"])
def test_rasterio_reads_a_map_of_one_variable_with_no_choice_to_make(
    folders: dict[str | None, Path], code: str
) -> None:
    path = folders[code] / "map_velocity.nc"
    with rasterio.open(path) as raster, xr.open_dataset(path, engine="netcdf4") as made:
        assert raster.count == 3
        assert raster.crs.to_epsg() == EPSG[code]
        np.testing.assert_array_equal(raster.read(2), made.velocity[1].to_numpy())


@pytest.mark.parametrize("code", CENTRES)
def test_ogrinfo_sees_layers_shapes_counts_and_crs(folders: dict[str | None, Path], code: str | None) -> None:
    with xr.open_dataset(folders[code] / "bent_curtain.nc", engine="netcdf4") as curtain:
        cells = curtain.sizes["cell"]
    for name, expected in (
        (
            "survey.nc",
            {"lines": ("Line String", 3), "stations": ("3D Point", 150), "boreholes": ("3D Line String", 6)},
        ),
        ("bent_curtain.nc", {"cells": ("3D Polygon", cells)}),
    ):
        said = run("ogrinfo", "-ro", "-so", "-al", str(folders[code] / name))
        _, *layers = said.split("Layer name: ")
        assert [layer.split("\n")[0] for layer in layers] == list(expected)
        for layer, (kind, count) in zip(layers, expected.values(), strict=True):
            assert f"Geometry: {kind}\n" in layer
            assert f"Feature Count: {count}\n" in layer
            found = re.findall(r'^    ID\["EPSG",(\d+)\]\]', layer, flags=re.MULTILINE)
            assert found == ([] if code is None else [str(EPSG[code])])


def test_ogrinfo_reads_fields_and_null_where_there_is_none(folders: dict[str | None, Path]) -> None:
    path = folders["EPSG:32631"] / "survey.nc"

    def station(number: int) -> str:
        said = run("ogrinfo", "-ro", "-al", "-fid", str(number), str(path), "stations")
        return said.split("OGRFeature")[1]

    assert "station_name (String) = source 2" in station(1)
    assert "station_residual (Real(Float32)) = -0.95918" in station(1)
    assert "POINT Z (429991 5700000 60)" in station(1)
    # Receivers have no static here; what is NULL is not listed, or as such.
    assert "station_static (Real(Float32)) = -9" in station(1)
    assert re.search(r"station_static .* = (?!\(null\))", station(30)) is None


def test_ogrinfo_reads_a_cell_as_an_upright_ring_with_its_values(folders: dict[str | None, Path]) -> None:
    path = folders["EPSG:32631"] / "bent_curtain.nc"
    said = run("ogrinfo", "-ro", "-al", "-fid", "50", str(path), "cells").split("OGRFeature")[1]
    with xr.open_dataset(path, engine="netcdf4") as curtain:
        ring = np.column_stack([curtain[f"cell_{axis}"][250:255] for axis in "xyz"])
        velocity = float(curtain.velocity[50])
    (written,) = re.findall(r"POLYGON Z \(\((.*)\)\)", said)
    found = np.array([[float(number) for number in node.split()] for node in written.split(",")])
    np.testing.assert_allclose(found, ring)
    assert float(re.findall(r"velocity .* = (.*)", said)[0]) == pytest.approx(velocity, rel=1e-6)
