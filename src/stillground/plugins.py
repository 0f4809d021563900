"""Kinds, solvers and rules by name: built-in and third-party through the same entry points."""

from __future__ import annotations

from dataclasses import dataclass
from difflib import get_close_matches
from functools import cache
from importlib.metadata import EntryPoint, entry_points
from inspect import signature
from typing import Literal, cast

from stillground.errors import PluginError
from stillground.protocols import Kind, Rule, Solver

Group = Literal["physics", "solvers", "rules"]


@dataclass(frozen=True)
class Plugin:
    """A registered name and the distribution that it comes from."""

    name: str
    distribution: str
    target: str


@cache
def _entries(group: Group) -> dict[str, EntryPoint]:
    found: dict[str, EntryPoint] = {}
    for entry in entry_points(group=f"stillground.{group}"):
        known = found.setdefault(entry.name, entry)
        if known.value != entry.value:
            raise PluginError(
                f"two packages register '{entry.name}' in stillground.{group}: {_source(known)} and "
                f"{_source(entry)}; uninstall one"
            )
    return found


def _source(entry: EntryPoint) -> str:
    return f"{entry.dist.name} {entry.dist.version}" if entry.dist else "unknown"


def registered(group: Group) -> tuple[Plugin, ...]:
    """All that is registered in a group, built-in first, then by name.

    Raises
    ------
    PluginError
        When two packages register one name.
    """
    plugins = [Plugin(name, _source(entry), entry.value) for name, entry in _entries(group).items()]
    return tuple(sorted(plugins, key=lambda p: (not p.distribution.startswith("stillground "), p.name)))


def _load(group: Group, name: str) -> object:
    entries = _entries(group)
    if name not in entries:
        near = get_close_matches(name, entries, n=1)
        advice = f"did you mean '{near[0]}'?" if near else f"there are {', '.join(sorted(entries))}"
        raise PluginError(f"nothing is registered as '{name}'; {advice}")
    try:
        return entries[name].load()
    except Exception as error:
        raise PluginError(f"'{name}' from {_source(entries[name])} cannot be loaded: {error}") from error


def kind(name: str) -> Kind:
    """The kind of measurement registered under a name (an instance of what is registered).

    Raises
    ------
    PluginError
        For an unknown name, with the nearest known one; for something that is no `Kind`.
    """
    made = _load("physics", name)
    found = made() if isinstance(made, type) else made
    if not isinstance(found, Kind):
        raise PluginError(
            f"'{name}' from {_source(_entries('physics')[name])} is no kind of measurement: it must derive "
            f"from stillground.protocols.Kind"
        )
    return found


def solver(name: str) -> Solver:
    """The solver registered under a name; errors as `kind`."""
    return cast(Solver, _load("solvers", name))


def options(name: str) -> tuple[str, ...]:
    """Names of the options that a solver takes: its keyword-only arguments."""
    found = signature(solver(name)).parameters.values()
    return tuple(p.name for p in found if p.kind is p.KEYWORD_ONLY)


def keeps_bounds(name: str) -> bool:
    """Whether a solver keeps bounds on the ground property: it says so by ``keeps_bounds = True``."""
    return bool(getattr(solver(name), "keeps_bounds", False))


def holds_rows(name: str) -> bool:
    """Whether a solver holds all rows of its operator: it says so by ``holds_rows = True``."""
    return bool(getattr(solver(name), "holds_rows", False))


def rule(name: str) -> Rule:
    """The stopping rule registered under a name; errors as `kind`."""
    return cast(Rule, _load("rules", name))
