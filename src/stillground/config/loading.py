"""Reads a configuration, applies overrides, and tells every fault by its key."""

from __future__ import annotations

import tomllib
import types
from collections.abc import Iterable, Mapping, Sequence
from contextlib import suppress
from difflib import get_close_matches
from pathlib import Path
from typing import Any, Union, get_args, get_origin

from pydantic import BaseModel, ValidationError

from stillground import plugins
from stillground.config.schema import config_class
from stillground.config.settings import Config
from stillground.errors import ConfigError


def load(path: str | Path, overrides: Sequence[str] = ()) -> tuple[Config, str]:
    """Reads a TOML configuration.

    Parameters
    ----------
    path : str or Path
    overrides : sequence of str
        ``key=value`` each, as on the command line, the key dotted; a value that is no TOML is text.

    Returns
    -------
    config : Config
    text : str
        The file as it stood, with the overrides below it.

    Raises
    ------
    ConfigError
        When the file cannot be read, is no TOML, or holds faults: all of them, each by its key.
    """
    path = Path(path)
    try:
        text = path.read_text(encoding="utf-8-sig")
    except OSError as error:
        raise ConfigError(
            f"{path}: cannot be read: {error.strerror}; give the path of a TOML file"
        ) from error
    except UnicodeDecodeError as error:
        raise ConfigError(f"{path}: is not UTF-8 text (byte {error.start}); save it as UTF-8") from error
    try:
        data = tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        raise ConfigError(f'{path}: is no TOML: {error}; text values need quotes, as in "0.25 m"') from error
    for override in overrides:
        _apply(data, override)
        text += f"\n# --set {override}"
    return from_mapping(data, folder=path.parent, source=str(path)), text


def from_mapping(
    data: Mapping[str, Any], *, folder: str | Path = ".", source: str = "configuration"
) -> Config:
    """Settings from tables, as `tomllib` or Python gives them; paths are relative to ``folder``.

    Raises
    ------
    ConfigError
        With all faults, each by its key.
    """
    survey = data.get("survey")
    name = survey.get("kind") if isinstance(survey, Mapping) else None
    if not isinstance(name, str):
        raise ConfigError(f'{source}: survey.kind is missing; give one, like kind = "straight-ray"')
    try:
        kind = plugins.kind(name)
    except LookupError as error:
        raise ConfigError(f"{source}: survey.kind: {error}") from error
    model = config_class(kind)
    context: dict[str, Any] = {"folder": Path(folder), "kind": kind}
    try:
        # Faults of the kind's own settings are told with all others below.
        with suppress(ValidationError):
            settings = kind.Settings.model_validate(data.get("physics", {}), context=context)
            context["kind"] = kind.configured(settings)
        return model.model_validate(dict(data), context=context)
    except ValidationError as error:
        faults = [_explain(model, fault) for fault in error.errors(include_url=False)]
        listed = (
            faults[0] if len(faults) == 1 else f"{len(faults)} faults" + "".join(f"\n  - {f}" for f in faults)
        )
        raise ConfigError(f"{source}: {listed}") from None


def _apply(data: dict[str, Any], override: str) -> None:
    key, sign, value = override.partition("=")
    if not sign or not key.strip():
        raise ConfigError(f"--set {override}: write it as key=value, like ground.spacing='0.5 m'")
    *tables, last = key.strip().split(".")
    for name in tables:
        data = data.setdefault(name, {})
        if not isinstance(data, dict):
            raise ConfigError(f"--set {override}: {name} is a value and not a table")
    try:
        data[last] = tomllib.loads(f"value = {value}")["value"]
    except tomllib.TOMLDecodeError as error:
        if value.strip().startswith(("[", "{")):
            # Shells take the quotes within away.
            raise ConfigError(
                f"--set {override}: is no TOML: {error}; put the whole in single quotes, as in "
                f'--set \'rehearsal.patterns=["2 m", "4 m"]\''
            ) from error
        data[last] = value.strip()


def _explain(model: type[BaseModel], fault: Any) -> str:
    where = [str(part) for part in fault["loc"] if not str(part).startswith("function-")]
    key, value, kind = ".".join(where), fault["input"], fault["type"]
    if kind == "extra_forbidden":
        known = _keys(model, where[:-1])
        last = where[-1]
        elsewhere = [f"{table}.{last}" for table in _keys(model, []) if last in _keys(model, [table])]
        near = elsewhere[:1] or get_close_matches(last, known, n=1)
        advice = f"did you mean '{near[0]}'?" if near else f"there are {', '.join(known)}"
        return f"{key} is no setting; {advice}"
    if kind == "missing":
        return f"{key} is missing"
    message = str(fault["ctx"]["error"]) if "error" in fault.get("ctx", {}) else _lower(fault["msg"])
    shown = "" if isinstance(value, Mapping | list) or repr(value) in message else f" = {value!r}"
    return f"{key}{shown}: {message}" if key else message


def _lower(message: str) -> str:
    return message.replace("Input should be", "must be", 1)


def _keys(model: type[BaseModel], where: Iterable[str]) -> list[str]:
    for name in where:
        if name.isdigit():
            continue
        found = _models(model.model_fields[name].annotation)
        if not found:
            return []
        model = found[0]
    return list(model.model_fields)


def _models(annotation: Any) -> list[type[BaseModel]]:
    if isinstance(annotation, type) and issubclass(annotation, BaseModel):
        return [annotation]
    if get_origin(annotation) in (Union, types.UnionType, list, tuple):
        return [found for part in get_args(annotation) for found in _models(part)]
    return []
