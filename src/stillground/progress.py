"""Long work is a generator that yields `Progress` and returns its result; here is how to pass it on."""

from __future__ import annotations

from collections.abc import Generator
from dataclasses import replace
from typing import Any, TypeVar, cast

from stillground.protocols import Progress

T = TypeVar("T")


def staged(work: Generator[Progress, None, T], stage: str) -> Generator[Progress, None, T]:
    """The same work with its progress under a name of the caller's; what is thrown in reaches the work."""
    thrown: BaseException | None = None
    while True:
        try:
            step = next(work) if thrown is None else work.throw(thrown)
        except StopIteration as end:
            return cast(T, end.value)
        thrown = None
        try:
            yield replace(step, stage=stage)
        except BaseException as error:
            thrown = error


def finish(work: Generator[Any, None, T]) -> T:
    """Runs work to its end and drops its progress."""
    while True:
        try:
            next(work)
        except StopIteration as end:
            return cast(T, end.value)
