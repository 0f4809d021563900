"""The section plane: a vertical plane fitted to the positions of a survey in plan."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import xarray as xr
from numpy.typing import ArrayLike

from stillground.errors import SurveyError
from stillground.protocols import Array
from stillground.survey.faults import row_numbers, source_of

_COINCIDE = 1e-6
_PASSES = 20
# Distances under this share of the length count alike: within it the fit is that of least squares.
_NEAR = 0.02
_LONGEST = 100_000.0


@dataclass(frozen=True)
class Section:
    """A straight trace in plan.

    Parameters
    ----------
    origin : tuple of float
        East and north at distance 0, m.
    direction : tuple of float
        Unit vector in which distance grows.
    length : float
        From the first to the last position along the trace, m.

    Examples
    --------
    >>> section = Section(origin=(10.0, 0.0), direction=(0.0, 1.0), length=5.0)
    >>> float(section.along(10.0, 2.0)), float(section.across(9.0, 2.0))
    (2.0, 1.0)
    """

    origin: tuple[float, float]
    direction: tuple[float, float]
    length: float

    def along(self, x: ArrayLike, y: ArrayLike) -> Array:
        """Distance along the trace, m."""
        east, north = self.direction
        return np.asarray((np.asarray(x) - self.origin[0]) * east + (np.asarray(y) - self.origin[1]) * north)

    def across(self, x: ArrayLike, y: ArrayLike) -> Array:
        """Distance off the plane, m, positive to the left when looking along."""
        east, north = self.direction
        return np.asarray((np.asarray(y) - self.origin[1]) * east - (np.asarray(x) - self.origin[0]) * north)

    def plan(self, distance: ArrayLike) -> tuple[Array, Array]:
        """East and north at distances along the trace, m."""
        along = np.asarray(distance, dtype=np.float64)
        return self.origin[0] + along * self.direction[0], self.origin[1] + along * self.direction[1]


def plan_positions(ds: xr.Dataset) -> Array:
    """Positions in plan, shape (n, 2), m: all sources, then all receivers; or all stations."""
    ends = [prefix for prefix in ("source_", "receiver_", "") if f"{prefix}x" in ds]
    return np.concatenate(
        [np.stack([ds[f"{end}x"].values, ds[f"{end}y"].values], axis=1) for end in ends], axis=0
    )


def fit_section(positions: Array, first: ArrayLike, *, source: str = "survey") -> Section:
    """Fit the trace of a section to the distinct positions in plan, robustly.

    Parameters
    ----------
    positions : array, shape (n, 2)
        East and north, m; a position counts once however often it occurs.
    first : array, shape (2,)
        The first source or station: distance 0 lies at the end nearer to it. Where it is as near to
        both, distance grows eastwards, or northwards on a line due north.
    source : str
        What the positions came from, for the message.

    Raises
    ------
    SurveyError
        When all positions coincide in plan.

    Notes
    -----
    Total least squares, reweighted towards least absolute distances where positions lie far off.

    References
    ----------
    Golub, G. H. and Van Loan, C. F. (1980): An analysis of the total least squares problem. SIAM
    Journal on Numerical Analysis 17, 883-893.
    """
    distinct = np.unique(np.asarray(positions, dtype=np.float64), axis=0)
    weights = np.ones(len(distinct))
    for _ in range(_PASSES):
        center = np.average(distinct, axis=0, weights=weights)
        around = distinct - center
        east, north = np.linalg.svd(around * np.sqrt(weights)[:, None], full_matrices=False)[2][0]
        aside = np.abs(around @ (-north, east))
        # Least absolute distances: one misplaced position must not swing the plane away from the others.
        weights = 1 / np.maximum(aside, _NEAR * max(float(np.ptp(around @ (east, north))), _COINCIDE))
    if east < -1e-9 or (east < 1e-9 and north < 0):
        east, north = -east, -north
    along = (distinct - center) @ (east, north)
    low, high = float(along.min()), float(along.max())
    length = high - low
    if length < _COINCIDE:
        x, y = distinct[0]
        raise SurveyError(
            source,
            [f"all positions lie at {x:.10g}, {y:.10g} m in plan; a section needs two places or more"],
        )
    start = float((np.asarray(first, dtype=np.float64) - center) @ (east, north))
    if (start - low) - (high - start) > 1e-9 * length:
        east, north, low = -east, -north, -high
    origin = center + low * np.array([east, north])
    return Section((float(origin[0]), float(origin[1])), (float(east), float(north)), length)


def require_plausible(ds: xr.Dataset, section: Section) -> None:
    """Refuse a section so long or so short that its coordinates must be in other units.

    Raises
    ------
    SurveyError
        When it is longer than 100 km, or its coordinates look like degrees.
    """
    x, y = plan_positions(ds).T
    if section.length > _LONGEST:
        raise SurveyError(
            source_of(ds),
            [
                f"the section is {section.length / 1000:.4g} km long; are columns of x and y mixed up, or in "
                f"other units?"
            ],
        )
    if (
        section.length < 1
        and np.abs(x).max() <= 180
        and np.abs(y).max() <= 90
        and x.min() != x.round(1).min()
    ):
        raise SurveyError(
            source_of(ds),
            [
                f"the section is {section.length:.2g} m long and x and y look like degrees; project them to "
                f"a system in metres"
            ],
        )


def out_of_plane(ds: xr.Dataset, section: Section, tolerance: float | None = None) -> tuple[float, int]:
    """Largest distance of a position off the section plane, 0 within rounding, and the row that has it.

    Parameters
    ----------
    ds : xarray.Dataset
        On the dimension ``datum``.
    section : Section
    tolerance : float, optional
        What is allowed, m; 5 % of the section's length if not given.

    Raises
    ------
    SurveyError
        Past the tolerance.
    """
    allowed = 0.05 * section.length if tolerance is None else tolerance
    distances = np.abs(section.across(*plan_positions(ds).T))
    worst = int(np.argmax(distances))
    distance, row = float(distances[worst]), int(row_numbers(ds)[worst % ds.sizes["datum"]])
    if distance > allowed:
        raise SurveyError(
            source_of(ds),
            [
                f"row {row} lies {distance:.4g} m off the section plane, with {allowed:.4g} m allowed; "
                f"split the survey in straight lines (column line), or allow more with physics.out_of_plane"
            ],
        )
    return distance if distance > _COINCIDE else 0.0, row
