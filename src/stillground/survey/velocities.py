"""Velocity by depth below the ground surface, as one knows it before a survey."""

from __future__ import annotations

from pathlib import Path

import numpy as np

from stillground.errors import SurveyError
from stillground.protocols import Array
from stillground.survey.check import usable
from stillground.survey.faults import row_numbers, where
from stillground.survey.read import read

_EXPECTED = ("depth", "velocity")


def read_velocities(
    path: Path, lines: tuple[str, ...], plausible: tuple[float, float]
) -> tuple[Array, Array]:
    """Read columns ``depth`` and ``velocity``; a column ``line`` tells for which line of the survey.

    Parameters
    ----------
    path : path of the table, CSV
    lines : tuple of str
        Lines of the survey that the rows are wanted for; none where it names no line.
    plausible : pair of float
        The slowest and the fastest velocity of any ground, m/s.

    Returns
    -------
    depth, velocity : array, shape (n_rows,), m and m/s
        By increasing depth.

    Raises
    ------
    SurveyError
        With all faults of the table, none of its lines being wanted, depths that do not increase and
        velocities of no ground among them.
    """
    table, faults = usable(read(path, expected=_EXPECTED), _EXPECTED)
    if not faults and "line" in table:
        there = table["line"].values
        wanted = np.isin(there, lines)
        if not wanted.any() and np.any(there != ""):
            named = ", ".join(dict.fromkeys(there.tolist()))
            faults.append(
                f"column line: its rows are of {named}, the survey is "
                f"{'of line ' + ', '.join(lines) if lines else 'of no named line'}; "
                f"give rows of that line, or a table without column line"
            )
        elif wanted.any():
            table = table.isel(datum=np.flatnonzero(wanted))
    if not faults and not table.sizes["datum"]:
        faults.append("it has no row in use; give velocities at one depth or more")
    if not faults:
        steps = np.diff(table["depth"].values)
        faults += [
            f"column depth must increase from row to row: row {row} does not, at {depth:g} m"
            for row, depth in zip(
                row_numbers(table)[1:][steps <= 0][:1], table["depth"].values[1:][steps <= 0][:1], strict=True
            )
        ]
        velocity, (slowest, fastest) = table["velocity"], plausible
        odd = (velocity.values < slowest) | (velocity.values > fastest)
        faults += where(velocity, odd, row_numbers(table), f"lie within {slowest:g} to {fastest:g} m/s")
    if faults:
        raise SurveyError(str(path), faults)
    return table["depth"].values, table["velocity"].values
