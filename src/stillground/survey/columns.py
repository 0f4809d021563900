"""The vocabulary of survey tables: what a column of that name holds."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final, Literal

Rule = Literal["any", "positive", "not negative", "0 or 1", "text"]


@dataclass(frozen=True)
class Column:
    """A column of a survey table.

    Parameters
    ----------
    name : str
    units : str
        SI unit inside, UDUNITS text; "1" where nothing is measured, "" where it stays as it stands.
    long_name : str
    rule : str
        What every cell must be, beside finite.
    written : tuple of (str, int)
        Unit and decimals in tables that stillground writes; significant digits where there is no unit.
    """

    name: str
    units: str
    long_name: str
    rule: Rule = "any"
    written: tuple[str, int] = ("m", 3)

    @property
    def dimensional(self) -> bool:
        """Whether its numbers need a unit."""
        return self.units not in ("", "1")


_MS, _MS_ERROR = ("ms", 4), ("ms", 6)
_CONDUCTIVITY, _CONDUCTIVITY_ERROR = ("mS/m", 4), ("mS/m", 6)

COLUMNS: Final = {
    column.name: column
    for column in (
        Column("source_x", "m", "source, east"),
        Column("source_y", "m", "source, north"),
        Column("source_z", "m", "source, elevation"),
        Column("receiver_x", "m", "receiver, east"),
        Column("receiver_y", "m", "receiver, north"),
        Column("receiver_z", "m", "receiver, elevation"),
        Column("time", "s", "travel time", "positive", _MS),
        Column("time_error", "s", "standard deviation of the travel time", "positive", _MS_ERROR),
        Column("x", "m", "station, east"),
        Column("y", "m", "station, north"),
        Column("z", "m", "elevation of the ground"),
        Column("height", "m", "height of the instrument above the ground", "not negative"),
        Column("coil_spacing", "m", "distance between the coils", "positive"),
        Column("orientation", "1", "orientation of the dipoles", "text"),
        Column("reading", "S m-1", "apparent conductivity", "any", _CONDUCTIVITY),
        Column(
            "reading_error",
            "S m-1",
            "standard deviation of the apparent conductivity",
            "positive",
            _CONDUCTIVITY_ERROR,
        ),
        Column("depth", "m", "depth below the ground surface", "not negative"),
        Column("velocity", "m s-1", "velocity", "positive", ("m/s", 1)),
        Column("value", "", "measured value", "any", ("", 9)),
        Column("value_error", "", "standard deviation of the measured value", "positive", ("", 9)),
        Column("line", "1", "line of the survey", "text"),
        Column("use", "1", "whether the row is used", "0 or 1"),
    )
}


def column(name: str) -> Column:
    """The column of that name; one that stays as it stands where the vocabulary has none.

    Examples
    --------
    >>> column("gravity_error")
    Column(name='gravity_error', units='', long_name='gravity_error', rule='positive', written=('m', 3))
    """
    return COLUMNS.get(name) or Column(name, "", name, "positive" if name.endswith("_error") else "any")


def error_of(datum: str) -> str:
    """Name of the column with the standard deviations of ``datum``."""
    return f"{datum}_error"


def needed(expected: Sequence[str]) -> tuple[str, ...]:
    """Those of a kind's columns that a table must have: all but the errors, which can be made."""
    errors = {error_of(name) for name in expected}
    return tuple(name for name in expected if name not in errors)


def optional(expected: Sequence[str]) -> tuple[str, ...]:
    """The columns that a table of the kind may have besides: errors, ``line`` and ``use``."""
    errors = (error_of(name) for name in expected)
    return (*(name for name in errors if name in COLUMNS or name in expected), "line", "use")
