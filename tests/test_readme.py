"""What the README shows works as it stands there."""

from __future__ import annotations

import re
from pathlib import Path
from typing import Any

import numpy as np
from numpy.testing import assert_allclose
from tests.refraction_line import slotnick

from stillground.config import load
from stillground.pipeline.simulate import simulate
from stillground.survey import read

README = (Path(__file__).parents[1] / "README.md").read_text()


def snippet(language: str, word: str) -> str:
    """The only block of a language that holds a word."""
    (found,) = [
        block for block in re.findall(rf"^```{language}\n(.*?)^```", README, re.M | re.S) if word in block
    ]
    return str(found)


def test_travel_times_outside_the_tool_are_those_of_the_closed_form_and_so_is_their_derivative() -> None:
    """v = 500 + 60 depth (Slotnick 1959); times are homogeneous of degree one in slowness (Euler)."""
    said: dict[str, Any] = {}
    exec(snippet("python", "TravelTimes"), said)
    receivers, times, slowness = said["receivers"], said["times"], said["slowness"]
    assert_allclose(times, slotnick(np.zeros((12, 2)), receivers), rtol=5e-3)
    assert_allclose(said["change"], 0.01 * times, rtol=5e-3)
    assert_allclose(said["along_rays"].times, times, rtol=1e-12)
    assert_allclose(said["exact"] @ slowness, times, rtol=1e-9)
    deeper = slowness * (1 + 1e-5 * (said["elevation"].reshape(-1) < -3))
    difference = (said["travel_times"].predict(deeper) - times)[4:]
    assert_allclose((said["exact"] @ (deeper - slowness))[4:], difference, rtol=1e-3)


def test_a_survey_is_planned_from_first_to_last(tmp_path: Path) -> None:
    text = """
title = "Planned (invented)"
[survey]
kind = "curved-ray"
files = ["planned.csv"]
[ground]
spacing = "1 m"
correlation = { horizontal = "12 m", vertical = "4 m" }
"""
    (tmp_path / "line.toml").write_text(text + snippet("toml", "[simulate.sources]"))
    config, _ = load(tmp_path / "line.toml")
    path, n_data = simulate(config)
    # Nine shots into 25 geophones, but for those at the shots.
    assert n_data == 9 * 25 - 9
    planned = read(path)
    for end, step in (("source", 6.0), ("receiver", 2.0)):
        assert_allclose(np.unique(planned[f"{end}_x"]), np.arange(0.0, 49.0, step))
    near = np.abs(planned["source_x"] - planned["receiver_x"]).to_numpy() == 2.0
    assert_allclose(planned["time"][near], 2 / 500, atol=5 * 0.3e-3)
