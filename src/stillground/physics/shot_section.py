"""Sources and receivers of first arrivals, set into a vertical section."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import xarray as xr

from stillground.errors import SurveyError
from stillground.physics import first_arrivals
from stillground.protocols import Array, Integers
from stillground.survey import (
    Section,
    fit_section,
    numbered,
    out_of_plane,
    plan_positions,
    require_plausible,
    row_numbers,
    source_of,
)

# Points of a table of the surface are taken within this share of the section's length.
_CORRIDOR = 0.1


@dataclass(frozen=True)
class ShotSection:
    """Coordinates are (distance, elevation), m.

    Parameters
    ----------
    section : Section
    starts, ends : array, shape (n_data, 2)
    lengths : array, shape (n_data,)
        True straight lengths in space.
    groupings : mapping
        By source and by receiver.
    positions : mapping of str to array, shape (n, 2)
        Distinct places in the order of the groupings.
    corridor : float
        How far off the section points of the surface may lie, m.
    fact : str
    """

    section: Section
    starts: Array
    ends: Array
    lengths: Array
    groupings: dict[str, Integers]
    positions: dict[str, Array]
    corridor: float
    fact: str

    @property
    def everywhere(self) -> Array:
        """All starts, then all ends, shape (2 n_data, 2)."""
        return np.vstack([self.starts, self.ends])

    @property
    def across(self) -> Array:
        """Straight lengths on the section, shape (n_data,), m."""
        return np.asarray(np.linalg.norm(self.ends - self.starts, axis=1))


def shot_section(survey: xr.Dataset, tolerance: float | None) -> ShotSection:
    """Projects a survey on its section; ``tolerance``: how far positions may lie off it, m.

    Raises
    ------
    SurveyError
        When positions lie too far off the section, all in one place in plan, or a source and a
        receiver on the same point of it.
    """
    name = source_of(survey)
    first = (float(survey["source_x"][0]), float(survey["source_y"][0]))
    section = fit_section(plan_positions(survey), first, source=name)
    require_plausible(survey, section)
    aside, row = out_of_plane(survey, section, tolerance)
    in_space = first_arrivals.ends(survey)
    starts, ends = (
        np.column_stack([section.along(places[:, 0], places[:, 1]), places[:, 2]]) for places in in_space
    )
    across = np.linalg.norm(ends - starts, axis=1)
    if (across < 1e-3).any():
        rows = ", ".join(str(row) for row in row_numbers(survey)[across < 1e-3][:5])
        raise SurveyError(
            name, [f"source and receiver fall on one point of the section in row {rows}; set use to 0 there"]
        )
    groupings, positions = {}, {}
    for end, places, flat in zip(first_arrivals.ENDS, in_space, (starts, ends), strict=True):
        groupings[end], where = numbered(places)
        positions[end] = flat[where]
    return ShotSection(
        section=section,
        starts=starts,
        ends=ends,
        lengths=np.linalg.norm(in_space[1] - in_space[0], axis=1),
        groupings=groupings,
        positions=positions,
        corridor=max(_CORRIDOR * section.length, tolerance or 0.0),
        fact=f"section {section.length:.4g} m long; positions lie at most {aside:.2g} m off it (row {row})",
    )
