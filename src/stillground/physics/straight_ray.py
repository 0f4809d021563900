"""Travel times along straight rays in a vertical section: crosshole and the like."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import Any, Literal

import numpy as np
import xarray as xr
from pydantic import BaseModel, ConfigDict, Field

from stillground.errors import SurveyError
from stillground.grid import Grid
from stillground.ground import Ground
from stillground.operators.straight_rays import StraightRays
from stillground.protocols import Array, Extra, GroundProperty, Integers, Measurement
from stillground.protocols import Field as GroundField
from stillground.survey import Section, fit_section, out_of_plane, plan_positions, read_surface, row_numbers
from stillground.survey.quantities import InputPath, Length

# Prior standard deviation of the anisotropy: sediments seldom pass a tenth (common practice, no source).
_ANISOTROPY = 0.1
# Points of the surface are taken within this share of the section's length; positions may stand this
# far above it, as on a tripod.
_CORRIDOR, _ABOVE = 0.1, 2.0

# Seismic velocities of the ground, m s-1: from loose dry soil to the hardest rock, both with room
# (common practice, no source).
_PLAUSIBLE = (50, 10_000)
_LARGE_ERROR = 0.3
_SHORTEST, _LONGEST = 0.1, 100_000.0


class StraightRaySettings(BaseModel):
    """The table [physics] for straight rays."""

    model_config = ConfigDict(extra="forbid", frozen=True)

    surface: InputPath | None = Field(
        None, description="table x y z of the ground surface; ground above it is left out of products"
    )
    anisotropy: Literal["fit", "off"] = Field(
        "off", description="fit one number: horizontal over vertical slowness, elliptical"
    )
    out_of_plane: Length | None = Field(
        None, description="how far positions may lie off the section; default: 5 % of its length"
    )


@dataclass(frozen=True)
class RayScene:
    """Straight rays in a section; coordinates are (distance, elevation), m.

    Parameters
    ----------
    section : Section
    starts, ends : array, shape (n_data, 2)
    lengths : array, shape (n_data,)
        True lengths in space: across its plane the ground is taken as constant.
    data, errors : array, shape (n_data,)
        Times and their standard deviations, s.
    groupings : mapping
        By source and by receiver.
    positions, surface
        As in `stillground.protocols.Scene`.
    """

    section: Section
    starts: Array
    ends: Array
    lengths: Array
    data: Array
    errors: Array
    groupings: dict[str, Integers]
    positions: dict[str, Array]
    surface: tuple[Array, Array] | None
    inputs: tuple[Path, ...]
    facts: tuple[str, ...]
    anisotropy: bool
    doubts: tuple[str, ...]

    @property
    def paths(self) -> tuple[Array, Array]:
        return self.starts, self.ends

    @property
    def apparent(self) -> Array:
        return self.data / self.lengths

    @property
    def lower(self) -> tuple[float, ...]:
        return tuple(np.minimum(self.starts.min(axis=0), self.ends.min(axis=0)).tolist())

    @property
    def upper(self) -> tuple[float, ...]:
        return tuple(np.maximum(self.starts.max(axis=0), self.ends.max(axis=0)).tolist())

    def assemble(self, grid: Grid) -> Measurement:
        """The measurement on a section grid."""
        operator = StraightRays(grid, self.starts, self.ends, self.lengths)
        extras = (self._anisotropy(),) if self.anisotropy else ()
        return Measurement(operator, self.data, self.errors, self.groupings, extras)

    def _anisotropy(self) -> Extra:
        """Horizontal over vertical slowness less one, elliptical and small.

        The slowness along a ray at angle a to the horizontal is ``s (1 + e cos^2 a)`` to first order, so
        a time grows by ``e cos^2 a`` of itself. Less the mean over the rays, the unknown leaves the
        background alone: the section is then of the slowness in the mean direction of the rays.
        """
        along = self.ends - self.starts
        level = along[:, 0] ** 2 / np.sum(along**2, axis=1)
        response = (self.data * (level - level.mean()))[:, None]
        return Extra("anisotropy", response, _ANISOTROPY, "1")

    def coverage(self, grid: Grid, correlation: tuple[float, ...]) -> GroundField:
        """Length of ray in a unit of area, a Gaussian mean over half a correlation length, m-1.

        Rays have no width: without the mean the density would depend on the grid. The mean keeps the
        total length.
        """
        operator = StraightRays(grid, self.starts, self.ends, self.lengths)
        density = operator.rmatvec(np.ones(len(self.data))) / grid.weights()
        return GroundField(
            "path_density", grid.local_mean(density, correlation), "m-1", "ray length per area"
        )

    def predict(self, ground: Ground) -> Array:
        """Times through a described ground of slowness, shape (n_data,), s."""
        times = ground.line_integrals(self.starts, self.ends)
        return np.asarray(times * self.lengths / np.linalg.norm(self.ends - self.starts, axis=1))

    def trace(self, distance: Array) -> tuple[Array, Array]:
        """East and north of distances along the section, m."""
        return self.section.plan(distance)


class StraightRay:
    """First arrivals between boreholes, or along and across one, where rays are nearly straight."""

    name = "straight-ray"
    ground_property = GroundProperty(
        "slowness",
        "s m-1",
        "slowness of the first arrival",
        ("velocity", "m s-1", "velocity of the first arrival"),
    )
    columns = ("source_x", "source_y", "source_z", "receiver_x", "receiver_y", "receiver_z", "time")
    datum = "time"
    datum_units = "s"
    axes = ("distance", "elevation")
    # A line integral in two dimensions is bounded where s > (d - 1) / 2.
    bounded_above = 0.5
    Settings = StraightRaySettings

    def place(self, survey: xr.Dataset, settings: StraightRaySettings) -> RayScene:
        """Projects a survey on its section.

        Raises
        ------
        SurveyError
            When positions lie too far off the section, all in one place in plan, or a source and a
            receiver on the same point of it.
        """
        name = str(survey.attrs.get("source", "survey"))
        first = (float(survey["source_x"][0]), float(survey["source_y"][0]))
        section = fit_section(plan_positions(survey), first, source=name)
        _require_plausible(name, survey, section)
        aside, row = out_of_plane(survey, section, settings.out_of_plane)
        ends = {
            end: np.column_stack([survey[f"{end}_{axis}"].values for axis in "xyz"])
            for end in ("source", "receiver")
        }
        flat = {
            end: np.column_stack([section.along(places[:, 0], places[:, 1]), places[:, 2]])
            for end, places in ends.items()
        }
        short = np.linalg.norm(flat["source"] - flat["receiver"], axis=1) < 1e-3
        if short.any():
            rows = ", ".join(str(row) for row in row_numbers(survey)[short][:5])
            raise SurveyError(name, [f"source and receiver fall on one point of the section in row {rows}"])
        lengths = np.linalg.norm(ends["source"] - ends["receiver"], axis=1)
        data, errors = _values(survey, "time"), _values(survey, "time_error")
        # Of a survey that is only planned there is nothing to say.
        apparent = lengths / data if "time" in survey else np.empty(0)
        relative = errors / data if "time_error" in survey else np.empty(0)
        groupings, positions = {}, {}
        for end, places in ends.items():
            groupings[end], where = _numbered(places)
            positions[end] = flat[end][where]
        surface = None
        if settings.surface is not None:
            corridor = max(_CORRIDOR * section.length, settings.out_of_plane or 0.0)
            surface = read_surface(settings.surface, section, corridor)
            _require_below(settings.surface, surface, np.vstack([flat["source"], flat["receiver"]]))
        return RayScene(
            section=section,
            starts=flat["source"],
            ends=flat["receiver"],
            lengths=lengths,
            data=data,
            errors=errors,
            groupings=groupings,
            positions=positions,
            surface=surface,
            inputs=() if settings.surface is None else (settings.surface,),
            anisotropy=settings.anisotropy == "fit",
            facts=(
                f"section {section.length:.4g} m long; "
                f"positions lie at most {aside:.2g} m off it (row {row})",
                *_velocities(apparent),
            ),
            doubts=_doubts(apparent, relative, surface, np.vstack([flat["source"], flat["receiver"]])),
        )


def _velocities(apparent: Array) -> tuple[str, ...]:
    if apparent.size == 0:
        return ()
    low, middle, high = np.quantile(apparent, [0.0, 0.5, 1.0])
    return (f"apparent velocities {low:.4g} to {high:.4g} m s-1, median {middle:.4g}",)


def _doubts(
    apparent: Array, relative: Array, surface: tuple[Array, Array] | None, places: Array
) -> tuple[str, ...]:
    doubts = []
    slowest, fastest = _PLAUSIBLE
    odd = int(np.sum((apparent < slowest) | (apparent > fastest)))
    if odd:
        doubts.append(
            f"{odd} apparent velocities lie outside {slowest} to {fastest} m s-1: is the unit of time right?"
        )
    if relative.size and np.median(relative) > _LARGE_ERROR:
        doubts.append(
            f"errors are {np.median(relative):.2g} times the data: are the columns or units mixed up?"
        )
    if surface is not None:
        above = int(np.sum(places[:, 1] > np.interp(places[:, 0], *surface) + 0.1))
        if above:
            doubts.append(f"{above} positions of the table stand above the surface: z is elevation, up")
    return tuple(doubts)


def _require_plausible(name: str, survey: xr.Dataset, section: Section) -> None:
    x, y = plan_positions(survey).T
    if section.length > _LONGEST:
        raise SurveyError(
            name,
            [
                f"the section is {section.length / 1000:.4g} km long; are x and y of sources and receivers "
                f"mixed up, or in other units?"
            ],
        )
    if (
        section.length < 1
        and np.abs(x).max() <= 180
        and np.abs(y).max() <= 90
        and x.min() != x.round(1).min()
    ):
        raise SurveyError(
            name,
            [
                f"the section is {section.length:.2g} m long and x and y look like degrees; project them to "
                f"a system in metres"
            ],
        )


def _require_below(path: Path, surface: tuple[Array, Array], places: Array) -> None:
    above = places[:, 1] - np.interp(places[:, 0], *surface)
    worst = int(np.argmax(above))
    if above[worst] > _ABOVE:
        raise SurveyError(
            str(path),
            [
                f"the surface lies {above[worst]:.4g} m under a position at {places[worst, 0]:.4g} m along "
                f"the section, elevation {places[worst, 1]:.6g} m; check the elevations of both tables"
            ],
        )


def _numbered(places: Array) -> tuple[Integers, Integers]:
    """Numbers equal places (to the millimetre) in the order of the table; where each stands first."""
    _, where, group = np.unique(places.round(3), axis=0, return_index=True, return_inverse=True)
    order = np.argsort(where)
    rank = np.empty_like(order)
    rank[order] = np.arange(order.size)
    return rank[group.reshape(-1)], where[order]


def _values(survey: xr.Dataset, name: str) -> Any:
    """A column, or ones where a survey is only planned."""
    return survey[name].values if name in survey else np.ones(survey.sizes["datum"])
