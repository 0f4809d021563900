"""Settings that carry a unit, or a path beside the configuration, as pydantic fields."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated, Any

from pydantic import AfterValidator, BeforeValidator, ValidationInfo, WithJsonSchema

from stillground.survey.units import quantity


def _length(text: Any) -> float:
    return quantity(text, "m")


def _positive(value: float) -> float:
    if not value > 0:
        raise ValueError(f"must be above zero; got {value:g} m")
    return value


def _not_negative(value: float) -> float:
    if value < 0:
        raise ValueError(f"must not be negative; got {value:g} m")
    return value


def _beside_configuration(path: Path, info: ValidationInfo) -> Path:
    folder = (info.context or {}).get("folder", Path())
    return Path(folder) / path


Coordinate = Annotated[
    float, BeforeValidator(_length), WithJsonSchema({"type": "string", "examples": ["-2.5 m"]})
]
"""A length with its unit, any sign; metres inside."""

Length = Annotated[
    float,
    BeforeValidator(_length),
    AfterValidator(_positive),
    WithJsonSchema({"type": "string", "examples": ["0.25 m"]}),
]
"""A positive length with its unit; metres inside."""

Depth = Annotated[
    float,
    BeforeValidator(_length),
    AfterValidator(_not_negative),
    WithJsonSchema({"type": "string", "examples": ["2 m"]}),
]
"""A length with its unit, zero or more; metres inside."""

InputPath = Annotated[
    Path, AfterValidator(_beside_configuration), WithJsonSchema({"type": "string", "format": "path"})
]
"""A path relative to the configuration file."""
