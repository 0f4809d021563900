"""The configuration's class for a kind of survey, and the JSON Schema of all of them."""

from __future__ import annotations

from functools import cache
from typing import Any

from pydantic import Field, create_model

from stillground import plugins
from stillground.config.settings import Config, SimulateSettings
from stillground.protocols import Kind

_DRAFT = "https://json-schema.org/draft/2020-12/schema"
_TITLE = "stillground configuration"


def config_class(kind: Kind) -> type[Config]:
    """`Config` with the kind's own settings under ``physics``, and its plan among those of ``simulate``."""
    return _with_own(kind.Settings, kind.Plan)


@cache
def _with_own(settings: Any, plan: Any) -> type[Config]:
    said = "settings of the kind of survey"
    physics: Any = (settings, Field(default_factory=dict, validate_default=True, description=said))
    simulate = create_model("SimulateSettings", __base__=(SimulateSettings, plan))
    ground: Any = (simulate | None, Field(None, description=Config.model_fields["simulate"].description))
    made: type[Config] = create_model("Config", __base__=Config, physics=physics, simulate=ground)
    return made


def json_schema() -> dict[str, Any]:
    """JSON Schema (draft 2020-12) of the configuration, with one choice for each kind of survey."""
    choices = []
    definitions: dict[str, Any] = {}
    for plugin in plugins.registered("physics"):
        # Classes of one name differ from kind to kind.
        template = f"#/$defs/{plugin.name}.{{model}}"
        schema = config_class(plugins.kind(plugin.name)).model_json_schema(ref_template=template)
        definitions |= {f"{plugin.name}.{name}": model for name, model in schema.pop("$defs", {}).items()}
        survey = {"properties": {"kind": {"const": plugin.name}}}
        schema["properties"]["survey"] = {"allOf": [schema["properties"]["survey"], survey]}
        choices.append(schema | {"title": plugin.name})
    if len(choices) == 1:
        # Editors tell faults by key only where there is no choice between schemas.
        return {"$schema": _DRAFT} | choices[0] | {"title": _TITLE, "$defs": definitions}
    return {
        "$schema": _DRAFT,
        "title": _TITLE,
        "oneOf": choices,
        "$defs": definitions,
    }
