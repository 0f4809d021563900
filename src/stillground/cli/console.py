"""What is shown and where: tables on standard output, progress on standard error."""

from __future__ import annotations

import sys
from collections.abc import Callable, Generator
from typing import Any, TypeVar

from rich.console import Console
from rich.progress import BarColumn, TextColumn, TimeRemainingColumn
from rich.progress import Progress as Bar

from stillground.protocols import Progress

T = TypeVar("T")

_PLAIN_WIDTH = 120


def _console(stream: Any) -> Console:
    """Colours and the terminal's width where there is one, plain text of one width elsewhere."""
    width = None if stream.isatty() else _PLAIN_WIDTH
    return Console(file=stream, width=width, highlight=False, soft_wrap=False)


def out() -> Console:
    """Standard output as it is now."""
    return _console(sys.stdout)


def say(text: str = "") -> None:
    """Prints text as it is, never broken: paths stay whole."""
    out().print(text, markup=False, soft_wrap=True)


def heading(text: str) -> None:
    """Prints a title."""
    out().print(text, style="bold", markup=False)


def follow(
    work: Generator[Any, None, T], show: Callable[[Any], None], *, shown: type | tuple[type, ...], quiet: bool
) -> T:
    """Runs long work to its end; shows its progress, and what it yields of type ``shown``.

    On a terminal the progress is one line that moves, elsewhere a line for each stage.
    """
    errors = _console(sys.stderr)
    bar = Bar(
        TextColumn("{task.description}"),
        BarColumn(bar_width=24),
        TextColumn("{task.completed:.0f}/{task.total:.0f} {task.fields[detail]}"),
        TimeRemainingColumn(),
        console=errors,
        transient=True,
        disable=quiet or not errors.is_terminal,
    )
    with bar:
        task = bar.add_task("starting", total=1, detail="")
        stage = ""
        broken_off = False
        while True:
            try:
                event = work.throw(KeyboardInterrupt) if broken_off else next(work)
                broken_off = False
                if isinstance(event, Progress):
                    if event.stage != stage:
                        stage = event.stage
                        bar.reset(task, description=stage, total=event.total, detail="")
                        if not quiet and not errors.is_terminal:
                            errors.print(f"  {stage}", markup=False)
                    bar.update(task, completed=event.done, detail=event.detail)
                elif isinstance(event, shown) and not quiet:
                    bar.update(task, visible=False)
                    show(event)
                    bar.update(task, visible=True)
            except StopIteration as end:
                result: T = end.value
                return result
            except KeyboardInterrupt:
                # The work may judge what it has done; only when it does not is this the end.
                if broken_off:
                    errors.print("interrupted; profiles finished before are written")
                    raise
                broken_off = True
