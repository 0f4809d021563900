"""Ground conductivity along a line by coils at low induction number, in several spacings and orientations.

A reading is what the meter shows: the conductivity of uniform ground that would give it with the coils lying
on the ground. Carried at a height, the meter sees less of the same ground; the height enters the response, so
readings must not have been corrected for it.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace
from difflib import get_close_matches
from typing import Annotated, Any, Literal, Self

import numpy as np
import xarray as xr
from pydantic import BaseModel, BeforeValidator, ConfigDict, Field, WithJsonSchema, model_validator

from stillground.counted import counted
from stillground.errors import SurveyError
from stillground.grid import Grid
from stillground.ground import Ground
from stillground.kernels.cumulative_response import depth_of, node_weights, response
from stillground.operators.ground_conductivity import GroundConductivity
from stillground.operators.prior_root import PriorRoot
from stillground.protocols import Array, GroundProperty, Integers, Kind, Measurement, Scene
from stillground.protocols import Field as GroundField
from stillground.survey import (
    Polyline,
    Section,
    fit_section,
    out_of_plane,
    plan_positions,
    quantity,
    require_plausible,
    row_numbers,
    source_of,
    through_stations,
    to_si,
)
from stillground.survey.places import Places
from stillground.survey.quantities import Length

Orientation = Literal["vertical-dipole", "horizontal-dipole"]
ORIENTATIONS: tuple[Orientation, ...] = ("vertical-dipole", "horizontal-dipole")

# Below three spacings lie 16 % of a reading with vertical dipoles and 8 % with horizontal ones.
_DEPTH = 3.0
# Spacings within this share of each other belong to one configuration: 3.66 m and 12 feet.
_ROUNDING = 0.01
# Apparent conductivities of the ground, S m-1, both with room (common practice, no source).
_PLAUSIBLE = (1e-5, 10.0)
_LARGE_ERROR = 0.3
# Largest height over largest coil spacing from which on it is doubted: there a reading with vertical dipoles
# has lost three quarters, R(2) = 0.24 (McNeill 1980).
_HIGH = 2.0
# Spacing over skin depth from which on it is said. Over uniform ground vertical dipoles then read 11 % low
# and horizontal ones 5 % (McNeill 1980).
_LARGE_NUMBER = 0.1
_MU_0 = 4e-7 * math.pi
# The column on which the readings of a station are counted: levels to a least spacing, smoothness, and the
# scatter of its conductivity over the apparent one.
_LEVELS, _SMOOTHNESS, _SCATTER = 8, 2.0, 0.5
_SHOWN = 8
_GAUSS_NODES, _GAUSS_WEIGHTS = np.polynomial.legendre.leggauss(12)


def _frequency(text: Any) -> float:
    value = quantity(text, "Hz")
    if not value > 0:
        raise ValueError(f"must be above zero; got '{text}'")
    return value


def _height(text: Any) -> float:
    value = quantity(text, "m")
    if value < 0:
        raise ValueError(f"must not be below the ground; got '{text}'")
    return value


Frequency = Annotated[
    float, BeforeValidator(_frequency), WithJsonSchema({"type": "string", "examples": ["9.8 kHz"]})
]
Height = Annotated[float, BeforeValidator(_height), WithJsonSchema({"type": "string", "examples": ["0.9 m"]})]


class InductionSettings(BaseModel):
    """The table [physics] for induction."""

    model_config = ConfigDict(extra="forbid", frozen=True)

    frequency: Frequency | None = Field(
        None, description="of the instrument, to check coil spacing over skin depth; none: not checked"
    )
    trace: Literal["straight", "stations"] = Field(
        "straight", description="'stations': distance runs from station to station, for lines that bend"
    )
    out_of_plane: Length | None = Field(
        None, description="how far stations may lie off a straight line; default: 5 % of its length"
    )


class Leg(Places):
    """Stations on a straight line; legs of one name make one line, in their order."""

    name: str = Field(min_length=1, description="of the line")


class InductionPlan(BaseModel):
    """Lines of stations of a survey that is only planned: every station with every configuration."""

    model_config = ConfigDict(extra="forbid", frozen=True)

    lines: list[Leg] = Field([], description="default: the places of survey.files")
    coil_spacings: list[Length] = []
    orientations: list[Orientation] = Field(list(ORIENTATIONS), min_length=1)
    height: Height = Field(0.0, description="of the instrument above the ground")

    @model_validator(mode="after")
    def _both_or_none(self) -> Self:
        if bool(self.lines) != bool(self.coil_spacings):
            raise ValueError("give lines and coil_spacings, or neither for the places of survey.files")
        return self


@dataclass(frozen=True, kw_only=True)
class InductionScene(Scene):
    """Readings along a line; coordinates are (distance, elevation), m.

    Parameters
    ----------
    line : Section or Polyline
    along, ground, height, spacing : array, shape (n_data,)
        Distance of each reading, elevation of the ground there, height of the coils above it, and their
        spacing, m.
    vertical : array of bool, shape (n_data,)
        Whether the dipoles are vertical.
    data, errors : array, shape (n_data,)
        Readings and their standard deviations, S m-1.
    groupings : mapping
        By configuration and by station, stations in the order along the line.
    """

    line: Section | Polyline
    along: Array
    ground: Array
    height: Array
    spacing: Array
    vertical: np.ndarray[Any, np.dtype[np.bool_]]
    data: Array
    errors: Array
    groupings: dict[str, Integers]

    def assemble(self, grid: Grid) -> Measurement:
        """The measurement on a section grid."""
        return Measurement(self._operator(grid, tail=True), self.data, self.errors, self.groupings)

    def _operator(self, grid: Grid, *, tail: bool) -> GroundConductivity:
        where = (self.along, self.ground, self.height, self.spacing, self.vertical)
        return GroundConductivity(grid, *where, tail=tail)

    def coverage(self, grid: Grid, correlation: tuple[float, ...], rays: Sequence[Array] = ()) -> GroundField:
        """Response of all readings in a unit of area, a Gaussian mean over half a correlation length, m-2.

        Readings have no width: without the mean it would depend on the grid. What they see below the grid
        is left out.
        """
        operator = self._operator(grid, tail=False)
        density = operator.rmatvec(np.ones(self.data.size)) / grid.weights()
        return GroundField("sensitivity", grid.local_mean(density, correlation), "m-2", "response per area")

    def predict(self, ground: Ground) -> Array:
        """Readings over a described ground of conductivity, shape (n_data,), S m-1.

        The ground straight below each station counts as level layers. Level layers come in closed form;
        dipping ones and bodies too, by the place of their edges below the station; Gaussian bodies by 12
        Gauss points in every standard deviation, which is exact to rounding.

        Notes
        -----
        With u = R(z) as the variable a reading is ``int_0^R(top) sigma(z(u)) du``: constant ground between
        two depths gives its conductivity times a difference of R, and no end has to be set below.
        """
        places, n = self.along[:, None], self.along.size
        coils = (self.ground + self.height)[:, None]
        spacing, vertical = self.spacing[:, None], self.vertical[:, None]
        levels = np.minimum(ground.cuts(places), self.ground[:, None])
        with np.errstate(over="ignore"):
            depths = (coils - np.hstack([levels, self.ground[:, None]])) / spacing
        shares = np.sort(np.hstack([np.zeros((n, 1)), response(depths, vertical)]), axis=1)
        low, width = shares[:, :-1, None], np.diff(shares, axis=1)[:, :, None]
        # Intervals of no width would reach down without end.
        u = np.maximum(low + 0.5 * width * (1 + _GAUSS_NODES), 1e-12)
        elevation = coils[..., None] - spacing[..., None] * depth_of(u, vertical[..., None])
        points = np.stack([np.broadcast_to(places[..., None], u.shape), elevation], axis=-1)
        values = ground.values(points.reshape(-1, 2)).reshape(u.shape)
        return np.asarray(np.sum(0.5 * width * _GAUSS_WEIGHTS * values, axis=(1, 2)))

    def trace(self, distance: Array) -> tuple[Array, Array]:
        """East and north of distances along the line, m."""
        return self.line.plan(distance)


class Induction(Kind):
    """Apparent conductivity of the ground by coils carried along a line, at low induction number."""

    name = "induction"
    ground_property = GroundProperty("conductivity", "S m-1", "electrical conductivity")
    columns = ("x", "y", "z", "height", "coil_spacing", "orientation", "reading")
    datum = "reading"
    datum_units = "S m-1"
    axes = ("distance", "elevation")
    # Spread over depth and a point along the line, as an upright line in two dimensions.
    regularity = -0.5
    Settings = InductionSettings
    Plan = InductionPlan

    def plan(self, plan: InductionPlan) -> xr.Dataset | None:
        """Every station of every line with every coil spacing and orientation."""
        if not plan.lines:
            return None
        places = np.vstack([leg.positions() for leg in plan.lines])
        lines = np.repeat([leg.name for leg in plan.lines], [leg.count for leg in plan.lines])
        configurations = [(each, way) for way in plan.orientations for each in plan.coil_spacings]
        n_places, n_each = len(places), len(configurations)
        x, y, z = np.repeat(places, n_each, axis=0).T
        variables = {
            "x": x,
            "y": y,
            "z": z,
            "height": np.full(n_places * n_each, plan.height),
            "coil_spacing": np.tile([each for each, _ in configurations], n_places),
            "orientation": np.tile([way for _, way in configurations], n_places),
            "line": np.repeat(lines, n_each),
        }
        return xr.Dataset({name: ("datum", values) for name, values in variables.items()})

    def place(self, survey: xr.Dataset, settings: InductionSettings) -> InductionScene:
        """Sets the stations of a line into its section.

        Raises
        ------
        SurveyError
            For unknown orientations, stations too far off a straight line or all in one place, or a line that
            turns back.
        """
        vertical = _vertical(survey)
        line: Section | Polyline
        if settings.trace == "stations":
            line, point = through_stations(survey)
            along = line.distances[point]
            laid = f"{line.length:.4g} m long from station to station"
        else:
            first = (float(survey["x"][0]), float(survey["y"][0]))
            line = fit_section(plan_positions(survey), first, source=source_of(survey))
            require_plausible(survey, line)
            aside, row = out_of_plane(survey, line, settings.out_of_plane)
            along = line.along(survey["x"].values, survey["y"].values)
            laid = f"{line.length:.4g} m long; stations lie at most {aside:.2g} m off it (row {row})"
        z, height, spacing = (survey[name].values for name in ("z", "height", "coil_spacing"))
        _, where, station = np.unique(
            np.column_stack([along, z]).round(3), axis=0, return_index=True, return_inverse=True
        )
        positions = np.column_stack([along, z])[where]
        configuration, named, merged = _configurations(spacing, vertical)
        data = survey["reading"].values if "reading" in survey else np.ones(spacing.size)
        errors = survey["reading_error"].values if "reading_error" in survey else np.ones(spacing.size)
        share = response(height / spacing, vertical)
        scene = InductionScene(
            lower=tuple(positions.min(axis=0).tolist()),
            upper=tuple(positions.max(axis=0).tolist()),
            positions={"station": positions},
            apparent=data / share,
            against={"distance (m)": along, "coil spacing (m)": spacing},
            apart=dict(zip(ORIENTATIONS, (vertical, ~vertical), strict=True))
            if np.unique(vertical).size > 1
            else {},
            surface=_surface(positions),
            depth=_DEPTH * float(spacing.max()),
            facts=(f"line {laid}", f"configurations: {named}"),
            doubts=merged,
            line=line,
            along=along,
            ground=z,
            height=height,
            spacing=spacing,
            vertical=vertical,
            data=data,
            errors=errors,
            groupings={"configuration": configuration, "station": station.reshape(-1)},
        )
        return _told(scene, settings.frequency, row_numbers(survey)) if "reading" in survey else scene


def _vertical(survey: xr.Dataset) -> np.ndarray[Any, np.dtype[np.bool_]]:
    """Which dipoles are vertical.

    Raises
    ------
    SurveyError
        For words that are no orientation, by row.
    """
    words, rows = survey["orientation"].values, row_numbers(survey)
    faults = []
    for word in dict.fromkeys(words.tolist()):
        if word in ORIENTATIONS:
            continue
        near = get_close_matches(word.lower(), ORIENTATIONS, n=1, cutoff=0.4)
        advice = f"did you mean '{near[0]}'?" if near else f"write {' or '.join(ORIENTATIONS)}"
        found = rows[words == word]
        more = f" and {found.size - 1} more" if found.size > 1 else ""
        faults.append(f"column orientation holds '{word}' in row {found[0]}{more}; {advice}")
    if faults:
        raise SurveyError(source_of(survey), faults)
    return np.asarray(words == ORIENTATIONS[0])


def _configurations(
    spacing: Array, vertical: np.ndarray[Any, np.dtype[np.bool_]]
) -> tuple[Integers, str, tuple[str, ...]]:
    """The configuration of each reading, all by name, and which spacings were taken as one."""
    distinct, number = np.unique(spacing, return_inverse=True)
    apart = np.diff(distinct) > _ROUNDING * distinct[:-1]
    nominal = np.concatenate([[0], np.cumsum(apart)])
    sizes = [distinct[nominal == i] for i in range(nominal[-1] + 1)]
    keys = np.column_stack([~vertical, nominal[number.reshape(-1)]])
    found, configuration = np.unique(keys, axis=0, return_inverse=True)
    named = ", ".join(f"{sizes[i].mean():.3g} m {ORIENTATIONS[int(level)]}" for level, i in found)
    merged = tuple(
        f"coil spacings {', '.join(f'{each:.6g}' for each in size)} m are taken as one configuration: "
        f"are they rounded differently?"
        for size in sizes
        if size.size > 1
    )
    return configuration.reshape(-1), named, merged


def _surface(positions: Array) -> tuple[Array, Array]:
    """Distance and mean elevation of the stations, by ascending distance."""
    distance, group = np.unique(positions[:, 0].round(3), return_inverse=True)
    return distance, np.bincount(group, positions[:, 1]) / np.bincount(group)


def _told(scene: InductionScene, frequency: float | None, rows: Integers) -> InductionScene:
    """The scene with what its readings say beforehand."""
    milli = to_si(1.0, "mS/m", "S m-1")
    low, middle, high = np.quantile(scene.apparent, [0.0, 0.5, 1.0]) / milli
    facts = [
        *scene.facts,
        f"apparent conductivities {low:.4g} to {high:.4g} mS/m, median {middle:.4g}, the height allowed for",
        _informative(scene, _SCATTER * abs(middle) * milli),
    ]
    doubts = [*scene.doubts]
    data, size = scene.data, np.abs(scene.data)
    negative = data <= 0
    if negative.any():
        doubts.append(
            f"{counted(int(negative.sum()), 'reading is', 'readings are')} zero or negative "
            f"(row {rows[negative][0]}{' first' if negative.sum() > 1 else ''}) and kept: look for metal and "
            f"for the zero of the instrument"
        )
    odd = int(np.sum((size > 0) & ((size < _PLAUSIBLE[0]) | (size > _PLAUSIBLE[1]))))
    if odd:
        doubts.append(
            f"{counted(odd, 'reading lies', 'readings lie')} outside 0.01 mS/m to 10 S/m: is the unit of "
            f"reading right?"
        )
    highest, widest = float(scene.height.max()), float(scene.spacing.max())
    if highest >= _HIGH * widest:
        doubts.append(
            f"height: {highest:.3g} m is {highest / widest:.2g} times the largest coil spacing: "
            f"is its unit right?"
        )
    relative = np.median(scene.errors) / max(np.median(size), np.finfo(float).tiny)
    if relative > _LARGE_ERROR:
        doubts.append(f"errors are {relative:.2g} times the data: are the columns or units mixed up?")
    if frequency is None:
        facts.append(
            "whether the induction number is low was not checked: give physics.frequency of the instrument"
        )
    else:
        number = scene.spacing * np.sqrt(math.pi * frequency * _MU_0 * np.maximum(scene.apparent, 0.0))
        worst = int(np.argmax(number))
        said = f"coil spacing over skin depth is at most {number[worst]:.2g} (row {rows[worst]})"
        facts.append(said)
        if number[worst] > _LARGE_NUMBER:
            lower = counted(int(np.sum(number > _LARGE_NUMBER)), "reading is", "readings are")
            doubts.append(
                f"{said}, above {_LARGE_NUMBER:g}: {lower} lower than the response assumes, by 11 % "
                f"at {_LARGE_NUMBER:g} with vertical dipoles and 5 % with "
                f"horizontal ones"
            )
    return replace(scene, facts=tuple(facts), doubts=tuple(doubts))


def _informative(scene: InductionScene, deviation: float) -> str:
    """How many numbers the readings of the station with most of them carry, by their singular values."""
    station = scene.groupings["station"]
    here = np.flatnonzero(station == np.argmax(np.bincount(station)))
    values = informative(
        scene.height[here], scene.spacing[here], scene.vertical[here], scene.errors[here], deviation
    )
    shown = ", ".join(f"{value:.2g}" for value in values[:_SHOWN])
    readings = counted(here.size, "reading", "readings")
    return (
        f"informative at a station: {int(np.sum(values > 1))} of {readings}, "
        f"singular values {shown} (in errors; above 1 is signal) on level ground whose conductivity scatters "
        f"by {1000 * deviation:.3g} mS/m, correlated over {scene.spacing[here].min():.3g} m"
    )


def informative(
    height: Sequence[float] | Array,
    spacing: Sequence[float] | Array,
    vertical: Sequence[bool] | np.ndarray[Any, np.dtype[np.bool_]],
    errors: Sequence[float] | Array,
    deviation: float,
) -> Array:
    """Singular values of one station's readings in standard form, greatest first.

    The ground is level, varies by ``deviation`` (S m-1) with the prior of smoothness 2 over the least coil
    spacing, and goes down to three times the largest; values above 1 stand out of the errors.
    """
    heights, spacings, errors = (np.asarray(each, dtype=np.float64) for each in (height, spacing, errors))
    upright = np.asarray(vertical, dtype=bool)
    length = float(spacings.min())
    n = math.ceil(_LEVELS * _DEPTH * float(spacings.max()) / length)
    grid = Grid((-n * length / _LEVELS,), (length / _LEVELS,), (n + 1,))
    depth = (heights[:, None] - grid.axes[0]) / spacings[:, None]
    weights = node_weights(depth, heights / spacings, upright, tail=True)
    root = PriorRoot(grid, (length,), _SMOOTHNESS, deviation or 1.0)
    whitened = root.rmatmat(weights.T / errors)
    return np.asarray(np.linalg.svd(whitened, compute_uv=False))
