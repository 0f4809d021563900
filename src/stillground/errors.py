"""The error tree: what a user can mend raises one of these, with how to mend it.

Each is also the built-in type that a caller would expect, so that code which knows nothing of
stillground can still catch it. A numerical outcome (a target never reached) is not an error.
"""

from __future__ import annotations

from collections.abc import Sequence


class StillgroundError(Exception):
    """Anything a user of stillground can mend."""


class ConfigError(StillgroundError, ValueError):
    """A setting that is unknown, of the wrong type or out of range."""


class SurveyError(StillgroundError, ValueError):
    """A survey table that cannot be used; all faults of the table at once.

    Parameters
    ----------
    source : str
        What was read: a file, or a file and line.
    faults : sequence of str
        One sentence each, naming row and column, the value and what would be right.
    """

    def __init__(self, source: str, faults: Sequence[str]) -> None:
        self.source = source
        self.faults = tuple(faults)
        head = f"{source}: "
        if len(self.faults) == 1:
            super().__init__(head + self.faults[0])
        else:
            lines = "".join(f"\n  - {fault}" for fault in self.faults)
            super().__init__(f"{head}{len(self.faults)} faults{lines}")


class GridError(StillgroundError, ValueError):
    """An extent, spacing or node count no grid can be made of."""


class PluginError(StillgroundError, LookupError):
    """A kind, solver or rule that nobody has registered, or that two have."""


class CapacityError(StillgroundError, MemoryError):
    """More memory than the machine has, told before any of it is asked for."""


class OutputError(StillgroundError, OSError):
    """A place that cannot be written, or a file that would be overwritten."""


class ResultError(StillgroundError, ValueError):
    """A result folder that cannot be used: a file is missing, damaged or of another version."""
