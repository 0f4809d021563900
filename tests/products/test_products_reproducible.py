"""Identical inputs give identical bytes (common practice, no source)."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from pyproj import CRS

from stillground.products.curtain import curtain_dataset, write_curtain
from stillground.products.fit import fit_table, write_fit
from stillground.products.history import history_dataset, write_history
from stillground.products.ladder import ladder_dataset, write_ladder
from stillground.products.map import Slicing, map_dataset, write_map
from stillground.products.pattern import pattern_dataset, write_pattern
from stillground.products.picture import picture_dataset, write_picture
from stillground.products.points import points_table, write_points
from stillground.products.provenance import Provenance, timestamp
from stillground.products.summary import profile_summary, run_summary, write_summary
from stillground.products.survey import survey_dataset, write_survey
from stillground.protocols import Result, RuleOptions

from .crossing_lines import crossing_lines
from .made_up_results import axes_of, fit_places, make_patterns


def test_files_written_twice_are_the_same(
    result: Result,
    surface: Any,
    crs: CRS,
    provenance: Provenance,
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    monkeypatch.setenv("SOURCE_DATE_EPOCH", "1000000000")
    axes = axes_of(0.5)
    written = []
    slicing = Slicing(spacing=0.5, levels=(2.0, 8.0), reach=3.0)
    for folder in (tmp_path / "a", tmp_path / "b"):
        origin = replace(provenance, created=timestamp())
        common: dict[str, Any] = {"surface": surface, "provenance": origin}
        section = picture_dataset(
            "ab", result, easting=result.axes[0], northing=result.axes[0], crs=crs, tolerance=0.02, **common
        )
        lines = crossing_lines(result, "EPSG:32631")
        fit = fit_table(result, rows=np.arange(625), datum="time", unit="s", si_factor=1, **fit_places())
        paths = (
            write_picture(folder, "ab", section),
            write_curtain(folder, "ab", curtain_dataset(section, crs)),
            folder / "ab_curtain.qml",
            write_points(folder, "ab", points_table(section, crs)),
            *write_map(folder, map_dataset(lines, slicing, crs=crs, provenance=origin)),
            write_survey(folder, survey_dataset(lines, static_units="s", crs=crs, provenance=origin)),
            write_history(folder, "ab", history_dataset("ab", result, options=RuleOptions(), **common)),
            write_ladder(folder, "ab", ladder_dataset("ab", result, tolerance=0.02, **common)),
            write_pattern(folder, "ab", pattern_dataset("ab", make_patterns(axes), axes, **common)),
            write_fit(folder, "ab", fit),
            write_summary(folder, run_summary("t", "0", None, [profile_summary("ab", result, {})])),
        )
        written.append({path.name: path.read_bytes() for path in paths})
        assert {path.name for path in folder.iterdir()} == set(written[-1])
    assert set(written[0]) == {
        "ab_section.nc",
        "ab_curtain.nc",
        "ab_curtain.qml",
        "ab_points.csv",
        "map.nc",
        "map_slowness.nc",
        "map_velocity.nc",
        "map_slowness_noise_part.nc",
        "map_slowness_total_error.nc",
        "map_reliability.nc",
        "survey.nc",
        "ab_history.nc",
        "ab_ladder.nc",
        "ab_pattern.nc",
        "ab_fit.csv",
        "summary.json",
    }
    for name in ("ab_section.nc", "ab_curtain.nc", "map.nc", "survey.nc"):
        assert b"2001-09-09T01:46:40Z" in written[0][name], name
    for name, first in written[0].items():
        assert written[1][name] == first, name
