"""Every fault of a configuration is told by its key, with what would be right."""

from __future__ import annotations

import shlex
from pathlib import Path
from typing import Any

import pytest

from stillground.cli.app import app
from stillground.config import from_mapping, load
from stillground.errors import ConfigError


def tables(**changes: dict[str, Any]) -> dict[str, Any]:
    data: dict[str, Any] = {
        "title": "t",
        "survey": {"kind": "straight-ray", "files": ["a.csv"]},
        "ground": {"spacing": "0.5 m", "correlation": "2 m"},
    }
    for name, change in changes.items():
        data[name] = data.get(name, {}) | change
    return data


@pytest.mark.parametrize(
    ("change", "told"),
    [
        ({"ground": {"smothness": 1}}, "ground.smothness is no setting; did you mean 'smoothness'?"),
        ({"solvr": {}}, "solvr is no setting; did you mean 'solver'?"),
        ({"physics": {"surfce": "x"}}, "physics.surfce is no setting; did you mean 'surface'?"),
        ({"ground": {"spacing": 0.5}}, "ground.spacing: 0.5 has no unit; give it with one, like '0.5 m'"),
        ({"ground": {"spacing": "0.5 s"}}, "ground.spacing: '0.5 s': unit 's' does not convert to m"),
        ({"ground": {"spacing": "-1 m"}}, "ground.spacing: must be above zero; got '-1 m'"),
        ({"ground": {"spacing": {"vertical": "0 m"}}}, "ground.spacing.vertical = '0 m': must be above zero"),
        ({"ground": {"background": "1900"}}, "give it with one, like '1900 m/s'"),
        ({"errors": {"floor": "1 m"}}, "errors.floor: '1 m': unit 'm' does not convert to s"),
        ({"solver": {"iterations": "many"}}, "solver.iterations = 'many': must be a valid integer"),
        ({"refinement": {"levels": "4"}}, "refinement.levels = '4': must be a valid integer"),
        ({"ground": {"background": "0 s/m"}}, "ground.background: must be above zero; got '0 s/m'"),
        ({"solver": {"method": "lsqrr"}}, "registered as 'lsqrr'; did you mean 'lsqr'?"),
        ({"stopping": {"choose": "gvc"}}, "registered as 'gvc'; did you mean 'gcv'?"),
        ({"stopping": {"rules": ["discrepancy"]}}, "choose = 'gcv' is not among rules"),
        ({"stopping": {"tau": -1}}, "stopping.tau = -1: must be greater than 0"),
        ({"survey": {"crs": "EPSG:4326"}}, "has its coordinates in degrees"),
        ({"survey": {"crs": "EPSG:99999"}}, "'EPSG:99999' is no known coordinate system"),
        ({"survey": {"kind": "strait-ray"}}, "survey.kind: nothing is registered as 'strait-ray'"),
        ({"survey": {"files": []}}, "survey.files: List should have at least 1 item"),
        ({"map": {"depths": ["-1 m"]}}, "map.depths.0 = '-1 m': must not be negative"),
        ({"map": {"depths": []}}, "map.depths: List should have at least 1 item"),
        ({"map": {"depths": ["1 m"], "elevations": ["1 m"]}}, "map: give depths or elevations, not both"),
        ({"map": {"reach": "0 m"}}, "map.reach = '0 m': must be above zero"),
        ({"map": {"spacng": "1 m"}}, "map.spacng is no setting; did you mean 'spacing'?"),
        ({"output": {"products": ["sektion"]}}, "output.products.0 = 'sektion': must be 'section'"),
    ],
)  # fmt: skip
def test_a_fault_names_its_key_and_what_would_be_right(change: dict[str, Any], told: str) -> None:
    with pytest.raises(ConfigError) as caught:
        from_mapping(tables(**change), source="line.toml")
    assert told in str(caught.value)
    assert str(caught.value).startswith("line.toml: ")


def test_all_faults_are_told_at_once() -> None:
    data = tables(ground={"spacing": "1 s", "smothness": 1}, stopping={"tau": 0})
    with pytest.raises(ConfigError, match="3 faults") as caught:
        from_mapping(data)
    assert all(key in str(caught.value) for key in ("ground.spacing", "ground.smothness", "stopping.tau"))


def test_quantities_come_out_in_si() -> None:
    config = from_mapping(tables(ground={"background": "2 km/s"}, errors={"floor": "50 us"}))
    assert config.ground.background == pytest.approx(1 / 2000)
    assert config.errors.floor == pytest.approx(5e-5)
    assert config.ground.spacing.along(("distance", "elevation")) == (0.5, 0.5)


def test_one_length_serves_both_ways_and_two_stand_apart() -> None:
    config = from_mapping(tables(ground={"correlation": {"horizontal": "400 cm", "vertical": "2 m"}}))
    assert config.ground.correlation.along(("distance", "elevation")) == (4.0, 2.0)
    assert config.ground.correlation.along(("elevation",)) == (2.0,)


def test_paths_are_relative_to_the_configuration(tmp_path: Path) -> None:
    config = from_mapping(tables(physics={"surface": "s.csv"}), folder=tmp_path)
    assert config.survey.files == [tmp_path / "a.csv"]
    assert config.physics.surface == tmp_path / "s.csv"  # type: ignore[attr-defined]


def test_overrides_win_and_are_kept_with_the_text(small: Path) -> None:
    config, text = load(
        small / "small.toml", ["solver.iterations=7", "ground.spacing=0.5 m", 'title="Other"']
    )
    assert (config.solver.iterations, config.title) == (7, "Other")
    assert config.ground.spacing.vertical == 0.5
    assert text.endswith('# --set title="Other"')


@pytest.mark.parametrize(
    ("override", "told"),
    [
        ("spacing", "write it as key=value"),
        ("title.x=1", "title is a value and not a table"),
        ("rehearsal.patterns=[2 m,4 m]", r"""put the whole in single quotes, as in --set 'rehearsal\."""),
    ],
)
def test_an_override_that_cannot_be_applied_is_told(small: Path, override: str, told: str) -> None:
    with pytest.raises(ConfigError, match=told):
        load(small / "small.toml", [override])


def test_the_overrides_of_the_help_work_as_a_shell_gives_them(small: Path) -> None:
    lines = [line for each in app.registered_commands for line in (each.callback.__doc__ or "").splitlines()]
    words = [shlex.split(line) for line in lines if " --set " in line]
    overrides = [line[i + 1] for line in words for i, word in enumerate(line) if word == "--set"]
    config, _ = load(small / "small.toml", overrides)
    assert config.rehearsal.patterns == [2.0, 4.0]
    assert len(overrides) >= 4


@pytest.mark.parametrize(
    ("content", "told"),
    [
        (b"title = 'x\n", "is no TOML"),
        (b"\xff\xfe\x00", "is not UTF-8 text"),
        (b"", "survey.kind is missing"),
        (b"survey = 3", "survey.kind is missing"),
    ],
)
def test_a_file_that_is_no_configuration_is_told(tmp_path: Path, content: bytes, told: str) -> None:
    path = tmp_path / "c.toml"
    path.write_bytes(content)
    with pytest.raises(ConfigError, match=told):
        load(path)


def test_a_missing_file_is_told(tmp_path: Path) -> None:
    with pytest.raises(ConfigError, match="cannot be read: No such file"):
        load(tmp_path / "c.toml")
