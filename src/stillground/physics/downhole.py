"""First arrivals in a borehole from a source at the surface, through a layered ground."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
import xarray as xr
from pydantic import BaseModel, ConfigDict, Field

from stillground.errors import SurveyError
from stillground.grid import Grid
from stillground.ground import Ground
from stillground.operators.interval_integrals import IntervalIntegrals
from stillground.physics import first_arrivals
from stillground.protocols import Array, Differences, Integers, Kind, Measurement, Scene
from stillground.protocols import Field as GroundField
from stillground.survey import numbered, row_numbers, source_of
from stillground.survey.quantities import Length

# A path is level, and sees no layer from top to bottom, where its ends are less than this apart, m.
_LEVEL = 1e-3
# Beyond this angle off the vertical a ray through layers is no longer nearly straight, and may be
# overtaken by one along a faster layer (common practice, no source).
_SLANT = 45.0
# A borehole out of plumb by more of its depth than this is probably several (common practice, no source).
_OUT_OF_PLUMB = 0.2


class DownholeSettings(BaseModel):
    """The table [physics] for downhole times."""

    model_config = ConfigDict(extra="forbid", frozen=True)

    average_depth: Length = Field(
        30.0,
        description="down to here, from the ground surface, the time-averaged velocity is told",
        json_schema_extra={"default": "30 m"},
    )


@dataclass(frozen=True, kw_only=True)
class HoleScene(Scene):
    """Straight slant paths through a column; the one coordinate is elevation, m.

    Parameters
    ----------
    low, high : array, shape (n_data,)
        Elevations of the lower and upper end of each path, m.
    factors : array, shape (n_data,)
        True length over vertical distance.
    data, errors : array, shape (n_data,)
        Times and their standard deviations, s.
    groupings : mapping
        By source and by receiver.
    average_depth : float
        Below the highest position, m.
    place : pair of float
        East and north of the hole, m.
    """

    low: Array
    high: Array
    factors: Array
    data: Array
    errors: Array
    groupings: dict[str, Integers]
    average_depth: float
    place: tuple[float, float]

    def assemble(self, grid: Grid) -> Measurement:
        """The measurement on a grid of elevations."""
        return Measurement(self._operator(grid), self.data, self.errors, self.groupings)

    def _operator(self, grid: Grid) -> IntervalIntegrals:
        return IntervalIntegrals(grid, self.low, self.high, self.factors)

    def coverage(self, grid: Grid, correlation: tuple[float, ...], rays: Sequence[Array] = ()) -> GroundField:
        """Length of ray in a metre of elevation, a Gaussian mean over half a correlation length."""
        density = self._operator(grid).rmatvec(np.ones(self.data.size)) / grid.weights()
        return GroundField(
            "path_density", grid.local_mean(density, correlation), "1", "ray length per elevation"
        )

    def averages(self, grid: Grid) -> Mapping[str, Array]:
        """The mean slowness from the surface to the depth asked for, or to the deepest position."""
        top, deepest = self.upper[0], self.upper[0] - self.lower[0]
        depth = min(self.average_depth, deepest)
        said = f"down to {depth:.4g} m"
        if depth < self.average_depth:
            said += ", the deepest position"
        over = IntervalIntegrals(grid, np.array([top - depth]), np.array([top]), np.array([1 / depth]))
        return {said: over.A[0]}

    def predict(self, ground: Ground) -> Array:
        """Times through a described ground of slowness, shape (n_data,), s."""
        return np.asarray(self.factors * ground.line_integrals(self.low[:, None], self.high[:, None]))

    def trace(self, distance: Array) -> tuple[Array, Array]:
        """East and north of the hole, m."""
        east, north = self.place
        return np.full(distance.shape, east), np.full(distance.shape, north)


class Downhole(Kind):
    """First arrivals from the surface down a borehole, or up it: the ground is taken as level layers."""

    name = "downhole"
    ground_property = first_arrivals.SLOWNESS
    columns = first_arrivals.COLUMNS
    datum = "time"
    datum_units = "s"
    axes = ("elevation",)
    # The kernel of an integral over an interval is a box, which has just under half a derivative.
    regularity = 0.5
    Settings = DownholeSettings
    Plan = first_arrivals.ShotPlan

    def plan(self, plan: first_arrivals.ShotPlan) -> xr.Dataset | None:
        """Positions of every source with every receiver."""
        return first_arrivals.planned(plan)

    def place(self, survey: xr.Dataset, settings: DownholeSettings) -> HoleScene:
        """Takes elevations and true lengths from a survey.

        The ground surface is at the highest position, a source or the receiver of an uphole shot.

        Raises
        ------
        SurveyError
            When a source and its receiver are on one level.
        """
        in_space = first_arrivals.ends(survey)
        first, last = (places[:, 2] for places in in_space)
        vertical = np.abs(last - first)
        if (vertical < _LEVEL).any():
            rows = ", ".join(str(row) for row in row_numbers(survey)[vertical < _LEVEL][:5])
            raise SurveyError(
                source_of(survey),
                [
                    f"source and receiver stand on one level in row {rows}: such a time tells nothing of a "
                    f"column; set use to 0"
                ],
            )
        lengths = np.linalg.norm(in_space[1] - in_space[0], axis=1)
        low, high = np.minimum(first, last), np.maximum(first, last)
        top, bottom = float(high.max()), float(low.min())
        data, errors = first_arrivals.times(survey)
        groupings, positions = {}, {}
        for end, places in zip(first_arrivals.ENDS, in_space, strict=True):
            groupings[end], where = numbered(places)
            positions[end] = places[where, 2:]
        in_hole = np.where((first < last)[:, None], *in_space)
        angle = np.degrees(np.arccos(np.clip(vertical / lengths, -1, 1)))
        differences = _differences(low, top - low, data / lengths)
        return HoleScene(
            lower=(bottom,),
            upper=(top,),
            positions=positions,
            apparent=data / lengths,
            against={"depth (m)": top - low, "ray angle (degrees off the vertical)": angle},
            paths=(in_space[0][:, 2:], in_space[1][:, 2:]),
            surface=(np.zeros(1), np.array([top])),
            differences=differences if "time" in survey else None,
            facts=(
                f"hole {top - bottom:.4g} m deep below the ground surface at {top:.6g} m; "
                f"rays run up to {angle.max():.0f} degrees off the vertical",
                *first_arrivals.facts(survey, lengths),
                *_short(settings.average_depth, top - bottom),
            ),
            doubts=(
                *first_arrivals.doubts(survey, lengths),
                *_slanting(angle),
                *_scattered(in_hole),
                *(_backward(differences) if "time" in survey else ()),
            ),
            low=low,
            high=high,
            factors=lengths / vertical,
            data=data,
            errors=errors,
            groupings=groupings,
            average_depth=settings.average_depth,
            place=(float(in_hole[:, 0].mean()), float(in_hole[:, 1].mean())),
        )


def _differences(low: Array, depth: Array, apparent: Array) -> Differences:
    """Slowness between neighbouring levels of the hole from first differences of vertical times.

    A slant time is reduced to the vertical one from the surface by the cosine of its angle: the apparent
    slowness times the depth. Times at one level, from several sources or repeated, are averaged first
    (common practice; ASTM D7400).
    """
    levels, group = np.unique(low.round(3), return_inverse=True)
    times = np.bincount(group, apparent * depth) / np.bincount(group)
    return Differences(
        "first differences of times reduced to the vertical",
        levels[:-1],
        levels[1:],
        -np.diff(times) / np.diff(levels),
    )


def _short(wanted: float, deepest: float) -> tuple[str, ...]:
    if wanted <= deepest:
        return ()
    return (
        f"the average to {wanted:.4g} m (physics.average_depth) reaches {deepest:.4g} m only, "
        f"the deepest position",
    )


def _slanting(angle: Array) -> tuple[str, ...]:
    slanting = int(np.sum(angle > _SLANT))
    if not slanting:
        return ()
    return (
        f"{slanting} of {angle.size} paths run more than {_SLANT:g} degrees off the vertical, where offsets "
        f"exceed depths: rays are hardly straight there; mistrust the shallow ground, or set use to 0",
    )


def _scattered(in_hole: Array) -> tuple[str, ...]:
    across = float(np.hypot(*np.ptp(in_hole[:, :2], axis=0)))
    if across <= max(_OUT_OF_PLUMB * np.ptp(in_hole[:, 2]), 1.0):
        return ()
    return (
        f"the lower ends of paths lie up to {across:.3g} m apart in plan: is this one borehole? "
        f"A column line keeps several apart",
    )


def _backward(differences: Differences) -> tuple[str, ...]:
    backward = int(np.sum(differences.values <= 0))
    if not backward:
        return ()
    return (
        f"{backward} of {differences.values.size} first differences of the times are not above zero and "
        f"have no velocity: noise outweighs the step of the receivers there",
    )
