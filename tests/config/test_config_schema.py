"""The JSON Schema describes what the configuration accepts."""

from __future__ import annotations

import tomllib
from pathlib import Path

import pytest

from stillground.config import json_schema

CONFIGS = sorted((Path(__file__).parents[2] / "configs").glob("*.toml"))


@pytest.mark.parametrize("demo", CONFIGS, ids=lambda config: config.stem)
def test_the_schema_is_one_and_takes_every_demo(demo: Path) -> None:
    # jsonschema, a general validator of the published standard (draft 2020-12).
    jsonschema = pytest.importorskip("jsonschema")
    schema = json_schema()
    validator = jsonschema.Draft202012Validator(schema)
    validator.check_schema(schema)
    data = tomllib.loads(demo.read_text())
    validator.validate(data)
    data["ground"]["spacng"] = "1 m"
    assert not validator.is_valid(data)
