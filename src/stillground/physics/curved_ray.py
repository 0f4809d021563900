"""Travel times along rays that bend with the ground: refraction lines, and crosshole in strong contrast."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Annotated, Any

import numpy as np
import xarray as xr
from pydantic import BaseModel, BeforeValidator, ConfigDict, Field, ValidationInfo, WithJsonSchema
from pylops import LinearOperator
from scipy.spatial import KDTree

from stillground.errors import ConfigError, SurveyError
from stillground.grid import Grid
from stillground.ground import Ground
from stillground.operators.curved_rays import TravelTimes
from stillground.physics import first_arrivals
from stillground.physics.path_density import path_density
from stillground.physics.reciprocity import UNCHECKED, reciprocity
from stillground.physics.shot_section import ShotSection, shot_section
from stillground.physics.start_section import StartSection
from stillground.physics.start_velocity import StartVelocity, constant, fitted_velocity
from stillground.protocols import Array, Integers, Kind, NonlinearMeasurement, Scene
from stillground.protocols import Field as GroundField
from stillground.survey import (
    Section,
    quantity,
    read_earlier_section,
    read_surface,
    read_velocities,
    require_file,
    row_numbers,
    source_of,
)
from stillground.survey.faults import list_rows
from stillground.survey.quantities import InputPath, Length

# Positions may stand this far above a table of the surface, whose points lie apart: the surface is then
# taken through them, m.
_ABOVE = 0.5
# Positions of a line along the surface may stand this far below a table of it, m.
_BELOW = 2.0
# A table of the surface may leave this share of the line open at each end.
_OPEN = 0.05
# Depths and velocities where there are no times to fit them to, m and m s-1: soil over rock (common
# practice, no source).
_PLANNED = ((0.0, 30.0), (500.0, 2500.0))
# The described ground is marched through on nodes this part of the median distance of neighbouring
# positions apart, or as near as so many nodes allow.
_FINER, _MOST_NODES = 32, 2_000_000
# Points across a node's cell over which the described ground is averaged: sharp edges then lie where they
# are to a part of the spacing.
_ACROSS = 4


def _read_start(text: Any, info: ValidationInfo) -> float | Path | None:
    if text == "fit":
        return None
    if str(text).lower().endswith((".csv", ".nc")):
        return Path((info.context or {}).get("folder", Path())) / str(text)
    try:
        velocity = quantity(text, "m s-1")
    except ValueError as error:
        raise ValueError(
            f"{error}; give 'fit', a velocity like '1500 m/s', a table of depth and velocity, .csv, or the "
            f"section file of an earlier run, .nc"
        ) from error
    slowest, fastest = first_arrivals.PLAUSIBLE
    if not slowest <= velocity <= fastest:
        raise ValueError(f"{text} is no velocity of the ground; take one of {slowest} to {fastest} m/s")
    return velocity


Start = Annotated[
    float | Path | None,
    BeforeValidator(_read_start),
    WithJsonSchema({"type": "string", "examples": ["fit", "1500 m/s", "velocities.csv"]}),
]


class CurvedRaySettings(BaseModel):
    """The table [physics] for curved rays."""

    model_config = ConfigDict(extra="forbid", frozen=True)

    surface: InputPath | None = Field(
        None,
        description="table x y z of the ground surface, where rays end; default: through the positions that "
        "do not lie below others",
    )
    start: Start = Field(
        None,
        description="velocity that the rays begin with: 'fit' (default) a growth with depth to the times, "
        "one velocity, a table of depth and velocity (.csv), or the section of an earlier run (.nc)",
    )
    out_of_plane: Length | None = Field(
        None, description="how far positions may lie off the section; default: 5 % of its length"
    )


@dataclass(frozen=True, kw_only=True)
class CurvedRayMeasurement(NonlinearMeasurement):
    """First arrivals as a function of log slowness on one grid.

    Parameters
    ----------
    travel_times : TravelTimes
    stretch : array, shape (n_data,)
        Straight length in space over that on the section.
    """

    travel_times: TravelTimes
    stretch: Array

    def predict(self, field: Array) -> Array:
        """Times over log slowness, s."""
        return self.stretch * self.travel_times.predict(np.exp(field))

    def linearise(self, field: Array) -> tuple[Array, LinearOperator]:
        """Times and their derivative by log slowness: d T / d u = s dT / ds."""
        slowness = np.exp(np.asarray(field).reshape(-1))
        derivative = self.travel_times.linearise(slowness, self.errors / self.stretch)
        scaled = derivative.scaled(self.stretch, slowness)
        return scaled.times, scaled

    def rays(self, field: Array) -> tuple[Array, ...]:
        """From source to receiver, one a datum; one that tracing loses has no corners."""
        return self.travel_times.rays(np.exp(field))


@dataclass(frozen=True, kw_only=True)
class CurvedRayScene(Scene):
    """Rays that bend in a section; coordinates are (distance, elevation), m.

    Parameters
    ----------
    section : Section
    starts, ends : array, shape (n_data, 2)
        At or below the surface.
    stretch : array, shape (n_data,)
        Straight lengths in space over those on the section.
    data, errors : array, shape (n_data,)
        Times and their standard deviations, s.
    groupings : mapping
        By source and by receiver.
    ground_surface : pair of array
        Distance and elevation, m.
    start : StartVelocity or StartSection
    other_starts : mapping of str to the same
    """

    section: Section
    starts: Array
    ends: Array
    stretch: Array
    data: Array
    errors: Array
    groupings: dict[str, Integers]
    ground_surface: tuple[Array, Array]
    start: StartVelocity | StartSection
    other_starts: Mapping[str, StartVelocity | StartSection]

    def _travel_times(self, grid: Grid) -> TravelTimes:
        return TravelTimes(grid, self.starts, self.ends, surface=self.ground_surface)

    def assemble(self, grid: Grid) -> CurvedRayMeasurement:
        """The measurement on a section grid."""
        return CurvedRayMeasurement(
            data=self.data,
            errors=self.errors,
            groupings=self.groupings,
            start=self.start.log_slowness(grid, self.ground_surface),
            other_starts={
                name: start.log_slowness(grid, self.ground_surface)
                for name, start in self.other_starts.items()
            },
            travel_times=self._travel_times(grid),
            stretch=self.stretch,
        )

    def coverage(self, grid: Grid, correlation: tuple[float, ...], rays: Sequence[Array] = ()) -> GroundField:
        """Length of ray in a unit of area, m-1, as `path_density`."""
        starts, ends = (
            np.vstack([np.empty((0, 2)), *(ray[part] for ray in rays)])
            for part in (slice(None, -1), slice(1, None))
        )
        return path_density(grid, starts, ends, correlation)

    def predict(self, ground: Ground) -> Array:
        """Times through a described ground of slowness, shape (n_data,), s.

        There is no closed form: the ground is marched through on a grid of this method's own, on nodes a
        part of the distance between positions apart and down to half the length of the line. Head waves
        are off by some 0.1 ms where the spacing is 1/8 m; rays in uniform ground are exact.

        Raises
        ------
        ConfigError
            When bodies add up to a slowness that is not positive.
        """
        grid = self._own_grid()
        slowness = np.zeros(grid.n_nodes)
        nodes = np.stack(np.meshgrid(*grid.axes, indexing="ij"), axis=-1).reshape(-1, 2)
        offsets = (np.arange(_ACROSS) + 0.5) / _ACROSS - 0.5
        for offset in np.stack(np.meshgrid(offsets, offsets), axis=-1).reshape(-1, 2):
            slowness += ground.values(nodes + offset * np.array(grid.spacing)) / _ACROSS**2
        if slowness.min() <= 0:
            distance, elevation = nodes[slowness.argmin()]
            raise ConfigError(
                f"simulate: bodies add up to a slowness of {slowness.min():.3g} s m-1 at distance "
                f"{distance:.4g} m, elevation {elevation:.6g} m; let faster ones overlap less"
            )
        return self.stretch * self._travel_times(grid).predict(slowness)

    def _own_grid(self) -> Grid:
        places = np.unique(np.vstack([self.starts, self.ends]).round(3), axis=0)
        nearest = float(np.median(KDTree(places).query(places, k=2)[0][:, 1]))
        low, high = np.array(self.lower), np.array(self.upper)
        length = float(np.max(high - low))
        low, high = low - length * np.array([0.1, 0.5]), high + length * np.array([0.1, 0.0])
        spacing = max(nearest / _FINER, float(np.sqrt(np.prod(high - low) / _MOST_NODES)))
        shape = np.ceil((high - low) / spacing).astype(int) + 1
        return Grid(tuple(low.tolist()), (spacing, spacing), (int(shape[0]), int(shape[1])))

    def trace(self, distance: Array) -> tuple[Array, Array]:
        """East and north of distances along the section, m."""
        return self.section.plan(distance)


class CurvedRay(Kind):
    """First arrivals that dive and refract: along a line under relief, or between boreholes."""

    name = "curved-ray"
    ground_property = first_arrivals.SLOWNESS
    columns = first_arrivals.COLUMNS
    datum = "time"
    datum_units = "s"
    axes = ("distance", "elevation")
    # Of a line in two dimensions, as rays are near one ground: (1 - d) / 2.
    regularity = -0.5
    Settings = CurvedRaySettings
    Plan = first_arrivals.ShotPlan
    logarithmic = True

    def plan(self, plan: first_arrivals.ShotPlan) -> xr.Dataset | None:
        """Positions of every source with every receiver at another place."""
        pairs = first_arrivals.planned(plan)
        if pairs is None:
            return None
        starts, ends = first_arrivals.ends(pairs)
        return pairs.isel(datum=np.flatnonzero(np.linalg.norm(ends - starts, axis=1) > 1e-3))

    def place(self, survey: xr.Dataset, settings: CurvedRaySettings) -> CurvedRayScene:
        """Projects a survey on its section, under its surface.

        Raises
        ------
        SurveyError
            When positions lie too far off the section or above the surface, a source and a receiver on one
            point, times are faster or far slower than any ground, or a table beside the survey does not
            fit it.
        """
        placed = shot_section(survey, settings.out_of_plane)
        measured = "time" in survey
        data, errors = first_arrivals.times(survey)
        first_arrivals.require_waves(survey, placed.lengths)
        if measured:
            _require_possible(survey, placed.lengths, data, errors)
        surface, told = _surface(survey, placed, settings.surface)
        starts, ends = (_below(places, surface) for places in (placed.starts, placed.ends))
        depths = [np.interp(places[:, 0], *surface) - places[:, 1] for places in (starts, ends)]
        start = _start(survey, placed, settings.start, data, (depths[0], depths[1]))
        told_errors = measured and "time_error" in survey
        both = reciprocity(*first_arrivals.ends(survey), data, errors) if told_errors else None
        along = np.linspace(0.0, placed.section.length, 200)
        lowest_ground = float(np.interp(along, *surface).min())
        highest = max(float(surface[1].max()), float(placed.everywhere[:, 1].max()))
        lowest = float(np.minimum(starts[:, 1], ends[:, 1]).min())
        third = placed.section.length / 3
        return CurvedRayScene(
            lower=(0.0, lowest),
            upper=(placed.section.length, highest),
            positions={name: _below(places, surface) for name, places in placed.positions.items()},
            apparent=data / placed.lengths,
            against={
                "offset (m)": placed.across,
                "middle between source and receiver (m)": 0.5 * (starts[:, 0] + ends[:, 0]),
            },
            surface=surface,
            # Where boreholes reach deeper, the deepest position tells how far down the ground goes.
            depth=third if lowest_ground - third < lowest else None,
            facts=(
                placed.fact,
                told,
                *first_arrivals.facts(survey, placed.lengths),
                start.fact,
                *((UNCHECKED if both is None else both.fact,) if told_errors else ()),
            ),
            doubts=(
                *first_arrivals.doubts(survey, placed.lengths),
                *_buried(placed.everywhere, surface, settings.surface),
                *(() if both is None else both.doubts),
            ),
            error_estimate=None if both is None else both.estimate,
            inputs=tuple(path for path in (settings.surface, settings.start) if isinstance(path, Path)),
            section=placed.section,
            starts=starts,
            ends=ends,
            stretch=placed.lengths / np.linalg.norm(ends - starts, axis=1),
            data=data,
            errors=errors,
            groupings=placed.groupings,
            ground_surface=surface,
            start=start,
            other_starts=start.others(),
        )


def _require_possible(survey: xr.Dataset, lengths: Array, times: Array, errors: Array) -> None:
    """No way is shorter than the straight one, so what is too fast along it is wrong whatever the ground."""
    fastest = first_arrivals.PLAUSIBLE[1]
    wrong = lengths > fastest * (times + 3 * errors)
    if wrong.any():
        found = [
            (int(row), f"{length:.4g} m in {1e3 * time:.3g} ms")
            for row, length, time in zip(
                row_numbers(survey)[wrong], lengths[wrong], times[wrong], strict=True
            )
        ]
        raise SurveyError(
            source_of(survey),
            [
                f"times are faster than the fastest ground, {fastest} m s-1, even if later by three errors: "
                f"{list_rows(found)}; check the unit of time and the positions, or set use to 0"
            ],
        )


def _surface(survey: xr.Dataset, placed: ShotSection, table: Path | None) -> tuple[tuple[Array, Array], str]:
    """The ground surface by ascending distance, and where it comes from."""
    places = placed.everywhere
    if table is None:
        on_top = _not_below_others(places)
        return _through(places[on_top]), (
            f"surface through {len(np.unique(places[on_top].round(3), axis=0))} of "
            f"{len(np.unique(places.round(3), axis=0))} positions, those not below others; "
            f"physics.surface gives a better one"
        )
    require_file(table, "physics.surface")
    known = read_surface(table, placed.section, placed.corridor)
    ends = known[0].min(), known[0].max()
    left_open = max(ends[0], placed.section.length - ends[1])
    if left_open > _OPEN * placed.section.length:
        raise SurveyError(
            str(table),
            [
                f"the surface covers {ends[0]:.4g} to {ends[1]:.4g} m along a line of 0 to "
                f"{placed.section.length:.4g} m; give points as far as the positions reach"
            ],
        )
    above = places[:, 1] - np.interp(places[:, 0], *known)
    if above.max() > _ABOVE:
        n_data = len(placed.starts)
        _, once = np.unique(places.round(3), axis=0, return_index=True)
        found = [
            (int(row_numbers(survey)[i % n_data]), f"{first_arrivals.ENDS[i // n_data]} by {above[i]:.3g} m")
            for i in np.sort(once[above[once] > _ABOVE]).tolist()
        ]
        raise SurveyError(
            source_of(survey),
            [
                f"positions stand above the surface of {table.name}: {list_rows(found)}; "
                f"check the elevations of both tables"
            ],
        )
    raised = above > 0
    surface = _through(np.vstack([np.column_stack(known), places[raised]]))
    return surface, f"surface by {table.name}, with positions up to {max(above.max(), 0):.2g} m above it"


def _buried(places: Array, surface: tuple[Array, Array], table: Path | None) -> tuple[str, ...]:
    """Whether a line along the surface lies deep below the table of it."""
    depth = float(np.min(np.interp(places[:, 0], *surface) - places[:, 1]))
    if table is None or depth < _BELOW or np.mean(_not_below_others(places)) < 0.5:
        return ()
    return (
        f"all positions lie {depth:.3g} m or more below the surface of {table.name}, though few of them "
        f"below others: are the elevations of both tables in one system?",
    )


def _not_below_others(places: Array) -> Any:
    """Which places lie steeper than half a right angle below no other: those not in boreholes."""
    order = np.argsort(places[:, 0], kind="stable")
    x, z = places[order].T
    from_left = np.maximum.accumulate(z + x) - x
    from_right = np.maximum.accumulate((z - x)[::-1])[::-1] + x
    on_top = np.empty(len(places), dtype=bool)
    on_top[order] = z >= np.maximum(from_left, from_right) - 1e-3
    return on_top


def _through(places: Array) -> tuple[Array, Array]:
    """A polyline by ascending distance; of places at one distance, to the centimetre, the highest counts."""
    distance, group = np.unique(places[:, 0].round(2), return_inverse=True)
    elevation = np.full(distance.size, -np.inf)
    np.maximum.at(elevation, group, places[:, 1])
    return distance, elevation


def _below(places: Array, surface: tuple[Array, Array]) -> Array:
    """Places let down on the surface where rounding left them above it."""
    return np.column_stack([places[:, 0], np.minimum(places[:, 1], np.interp(places[:, 0], *surface))])


def _start(
    survey: xr.Dataset,
    placed: ShotSection,
    given: float | Path | None,
    times: Array,
    depths: tuple[Array, Array],
) -> StartVelocity | StartSection:
    if isinstance(given, Path):
        require_file(given, "physics.start")
        said = f"start: velocities of {given.name}"
        if given.suffix.lower() == ".nc":
            return StartSection(*read_earlier_section(given, placed.section, placed.corridor), said)
        lines = tuple(dict.fromkeys(survey["line"].values.tolist())) if "line" in survey else ()
        return StartVelocity(*read_velocities(given, lines, first_arrivals.PLAUSIBLE), said)
    if given is not None:
        return constant(given, f"start: {given:g} m s-1 everywhere")
    if "time" not in survey:
        depths_of, velocities = (np.array(each) for each in _PLANNED)
        return StartVelocity(depths_of, velocities, "start: soil over rock, for want of times")
    return fitted_velocity(times, placed.lengths, depths)
