"""Other people's programs open the files: the compliance checker, and GDAL old and new."""

from __future__ import annotations

import json
import shutil
import subprocess
import sys
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import rasterio
import xarray as xr
from pyproj import CRS

from stillground.products.history import history_dataset, write_history
from stillground.products.pattern import pattern_dataset, write_pattern
from stillground.products.picture import picture_dataset, write_picture
from stillground.products.provenance import Provenance
from stillground.protocols import Result, RuleOptions

from .made_up_results import axes_of, make_patterns

PLACES = ((5.5, 53.0), (12.5, 40.25))


@pytest.fixture(params=["EPSG:32631", None], ids=["projected", "local"])
def section(
    request: pytest.FixtureRequest, result: Result, surface: Any, provenance: Provenance, tmp_path: Path
) -> Path:
    made = picture_dataset(
        "crosshole-ab",
        result,
        easting=430_000 + 0.8 * result.axes[0],
        northing=5_700_000 + 0.6 * result.axes[0],
        crs=None if request.param is None else CRS(request.param),
        surface=surface,
        tolerance=0.02,
        provenance=provenance,
    )
    return write_picture(tmp_path, "crosshole-ab", made)


@pytest.fixture
def history(result: Result, surface: Any, provenance: Provenance, tmp_path: Path) -> Path:
    made = history_dataset(
        "crosshole-ab", result, options=RuleOptions(), surface=surface, provenance=provenance
    )
    return write_history(tmp_path, "crosshole-ab", made)


def run(*command: str) -> str:
    if shutil.which(command[0]) is None:
        pytest.skip(f"{Path(command[0]).name} is not installed (Debian package gdal-bin)")
    done = subprocess.run(command, capture_output=True, text=True, check=False, timeout=60)
    assert done.returncode == 0, done.stdout + done.stderr
    return done.stdout


def expected(path: Path) -> list[float]:
    with xr.open_dataset(path, engine="netcdf4") as file:
        return [float(file.slowness.sel(distance=d, elevation=z)) for d, z in PLACES]


def check(path: Path) -> None:
    run(str(Path(sys.executable).with_name("compliance-checker")), "-t", "cf:1.8", "-c", "lenient", str(path))


def test_the_compliance_checker_passes_the_section(section: Path) -> None:
    # In a local frame it passes for want of a rule: CF has no name for an engineering frame.
    check(section)


def test_the_compliance_checker_passes_the_history(history: Path) -> None:
    check(history)


def test_the_compliance_checker_passes_the_patterns(
    surface: Any, provenance: Provenance, tmp_path: Path
) -> None:
    axes = axes_of(0.5)
    made = pattern_dataset("crosshole-ab", make_patterns(axes), axes, surface=surface, provenance=provenance)
    check(write_pattern(tmp_path, "crosshole-ab", made))


def test_rasterio_reads_the_section_the_right_way_up(section: Path) -> None:
    with rasterio.open(f'NETCDF:"{section}":slowness') as raster:
        assert raster.transform[:6] == (0.25, 0, -2.125, 0, -0.25, 64.125)
        assert np.isnan(raster.nodata)
        read = [float(value[0]) for value in raster.sample(PLACES)]
    assert read == expected(section)
    assert read[0] != read[1]


def test_gdalinfo_sees_size_place_and_local_frame(section: Path) -> None:
    said = json.loads(run("gdalinfo", "-json", f"NETCDF:{section}:slowness"))
    assert said["size"] == [89, 121]
    assert said["geoTransform"] == [-2.125, 0.25, 0, 64.125, 0, -0.25]
    assert said["coordinateSystem"]["wkt"].startswith("ENGCRS")
    assert str(said["bands"][0]["noDataValue"]).lower() == "nan"


def test_gdallocationinfo_finds_the_values_at_two_elevations(section: Path) -> None:
    found = [
        float(run("gdallocationinfo", "-valonly", "-geoloc", f"NETCDF:{section}:slowness", str(d), str(z)))
        for d, z in PLACES
    ]
    np.testing.assert_allclose(found, expected(section), rtol=1e-6)


def test_ogrinfo_sees_the_trace_as_a_line_in_the_map(section: Path) -> None:
    said = run("ogrinfo", "-ro", "-so", "-al", str(section))
    layer = said[said.index("Layer name: trace_geometry") :]
    assert "Geometry: Line String" in layer
    assert "Feature Count: 1" in layer
    assert "trace_name: String" in layer
    with xr.open_dataset(section, engine="netcdf4") as file:
        local = "local frame" in file.crs.attrs.get("long_name", "")
    assert ('ID["EPSG",32631]' in layer) is not local
