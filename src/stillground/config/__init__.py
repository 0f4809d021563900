"""From a TOML file to typed settings in SI, every fault told at once."""

from stillground.config.loading import from_mapping, load
from stillground.config.schema import json_schema
from stillground.config.settings import Config

__all__ = ["Config", "from_mapping", "json_schema", "load"]
