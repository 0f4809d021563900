"""The trace of a line that bends: straight legs from station to station."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import xarray as xr
from numpy.typing import ArrayLike

from stillground.errors import SurveyError
from stillground.protocols import Array, Integers
from stillground.survey.faults import row_numbers, source_of
from stillground.survey.numbering import numbered


@dataclass(frozen=True)
class Polyline:
    """A trace in plan through points, going straight on beyond its ends.

    Parameters
    ----------
    points : array, shape (n, 2)
        East and north, m; no two that follow each other are the same.

    Examples
    --------
    >>> line = Polyline(np.array([[0.0, 0.0], [3.0, 0.0], [3.0, 4.0]]))
    >>> line.length
    7.0
    >>> line.plan([-1.0, 5.0])
    (array([-1.,  3.]), array([0., 2.]))
    """

    points: Array

    @property
    def distances(self) -> Array:
        """Of the points along the trace, m."""
        return np.concatenate([[0.0], np.cumsum(np.linalg.norm(np.diff(self.points, axis=0), axis=1))])

    @property
    def length(self) -> float:
        return float(self.distances[-1])

    def plan(self, distance: ArrayLike) -> tuple[Array, Array]:
        """East and north at distances along the trace, m."""
        at, ends = np.asarray(distance, dtype=np.float64), self.distances
        leg = np.clip(np.searchsorted(ends, at, side="right") - 1, 0, ends.size - 2)
        share = (at - ends[leg]) / (ends[leg + 1] - ends[leg])
        east, north = (self.points[leg] + share[..., None] * np.diff(self.points, axis=0)[leg]).T
        return east, north


def through_stations(ds: xr.Dataset) -> tuple[Polyline, Integers]:
    """The trace through the stations of a survey in the order of its rows, and the point of each row.

    Parameters
    ----------
    ds : xarray.Dataset
        On the dimension ``datum``, with ``x`` and ``y``.

    Raises
    ------
    SurveyError
        When the stations stand in one place, or the line turns back at one.
    """
    places = np.column_stack([ds["x"].values, ds["y"].values])
    point, first = numbered(places)
    points = places[first]
    if len(points) < 2:
        x, y = points[0]
        raise SurveyError(
            source_of(ds),
            [f"all positions lie at {x:.10g}, {y:.10g} m in plan; a section needs two places or more"],
        )
    legs = np.diff(points, axis=0)
    back = np.flatnonzero(np.sum(legs[1:] * legs[:-1], axis=1) < 0)
    if back.size:
        row = int(row_numbers(ds)[first[back[0] + 1]])
        raise SurveyError(
            source_of(ds),
            [
                f"the line turns back at the station of row {row}; bring the rows in the order in which the "
                f"line runs, or split it there (column line)"
            ],
        )
    return Polyline(points), point
