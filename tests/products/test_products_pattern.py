"""The patterns in a file: what went in, what came back, and the smallest size that does."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import xarray as xr

from stillground.errors import OutputError
from stillground.products.pattern import pattern_dataset, smallest_size, write_pattern
from stillground.products.provenance import Provenance
from stillground.protocols import Array, Pattern

from .made_up_results import axes_of, make_patterns

AXES = axes_of(0.5)


def written(
    patterns: tuple[Pattern, ...], provenance: Provenance, folder: Path, surface: Any = None
) -> xr.Dataset:
    made = pattern_dataset("crosshole-ab", patterns, AXES, surface=surface, provenance=provenance)
    with xr.open_dataset(write_pattern(folder, "crosshole-ab", made), engine="netcdf4") as file:
        return file.load()


def test_every_pattern_is_there_by_its_name_and_size(
    provenance: Provenance, surface: Any, tmp_path: Path
) -> None:
    patterns = make_patterns(AXES)
    file = written(patterns, provenance, tmp_path, surface)
    assert file.truth.dims == ("pattern", "elevation", "distance")
    assert file.pattern_size.attrs["units"] == "m"
    indexed = file.set_index(pattern=["pattern_name", "pattern_size"])
    for pattern in patterns:
        one = indexed.sel(pattern_name=pattern.name, pattern_size=pattern.size)
        for field in ("truth", "returned", "share"):
            value = one[field].sel(distance=5.5, elevation=53.0)
            expected = getattr(pattern, field)[15, 38]
            np.testing.assert_allclose(value, expected, atol=1e-6)
            assert one[field].sel(elevation=64.0).isnull().all()


def test_the_smallest_size_is_that_of_the_smallest_bodies_that_come_back(
    provenance: Provenance, tmp_path: Path
) -> None:
    file = written(make_patterns(AXES), provenance, tmp_path)
    smallest = file.smallest_size
    assert smallest.attrs["units"] == "m"
    for distance, elevation, size in ((5, 50, 2), (15, 50, 4), (5, 38, 2), (15, 36, np.nan)):
        np.testing.assert_equal(float(smallest.sel(distance=distance, elevation=elevation)), size)


@pytest.mark.parametrize(("share", "size"), [(0.5, 3.0), (0.499, np.nan)])
def test_half_of_a_body_is_enough(share: float, size: float) -> None:
    field: Array = np.full((2, 2), share)
    body = Pattern("bodies", 3.0, field, field, field)
    np.testing.assert_array_equal(smallest_size((body,)), np.full((2, 2), size))


def test_checkerboards_do_not_count_as_bodies(provenance: Provenance) -> None:
    whole = np.ones((2, 2))
    board = Pattern("checkerboard", 1.0, whole, whole, whole)
    large = Pattern("bodies", 8.0, whole, whole, whole)
    np.testing.assert_array_equal(smallest_size((board, large)), 8 * whole)
    boards = tuple(p for p in make_patterns(AXES) if p.name == "checkerboard")
    made = pattern_dataset("ab", boards, AXES, surface=None, provenance=provenance)
    assert "smallest_size" not in made


def test_a_column_has_elevation_only(provenance: Provenance) -> None:
    column = tuple(
        replace(p, truth=p.truth[3], returned=p.returned[3], share=p.share[3]) for p in make_patterns(AXES)
    )
    made = pattern_dataset("ab", column, AXES[1:], surface=None, provenance=provenance)
    assert made.share.dims == ("pattern", "elevation")
    assert made.smallest_size.dims == ("elevation",)


def test_the_file_says_that_it_is_an_exercise(provenance: Provenance) -> None:
    made = pattern_dataset("ab", make_patterns(AXES), AXES, surface=None, provenance=provenance)
    assert "no measure of its resolution" in made.attrs["summary"]
    assert "2, 4 m" in made.attrs["summary"]


def test_a_place_that_cannot_be_written_is_named(provenance: Provenance, tmp_path: Path) -> None:
    (tmp_path / "results").write_text("")
    made = pattern_dataset("ab", make_patterns(AXES), AXES, surface=None, provenance=provenance)
    with pytest.raises(OutputError, match=r"ab_pattern\.nc"):
        write_pattern(tmp_path / "results", "ab", made)
