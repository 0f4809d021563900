"""Runs that a user breaks off."""

from __future__ import annotations

from pathlib import Path

from stillground.config import load
from stillground.pipeline.answer import answer
from stillground.pipeline.grids import plan_grids
from stillground.pipeline.profiles import read_profiles
from stillground.progress import finish
from stillground.protocols import Result


def broken_at(path: Path, stage: str, *overrides: str, done: int = 0) -> Result:
    """The answer of a configuration broken off in a stage, once ``done`` steps of it are."""
    config, _ = load(path, overrides)
    (profile,) = read_profiles(config)
    work = answer(profile, plan_grids(profile, config), config)
    step = next(work)
    while stage not in step.stage or step.done < done:
        step = next(work)
    try:
        work.throw(KeyboardInterrupt)
        return finish(work)
    except StopIteration as end:
        return end.value
