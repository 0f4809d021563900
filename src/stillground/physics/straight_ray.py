"""Travel times along straight rays in a vertical section: crosshole and the like."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Literal

import numpy as np
import xarray as xr
from pydantic import BaseModel, ConfigDict, Field

from stillground.counted import counted
from stillground.errors import SurveyError
from stillground.grid import Grid
from stillground.ground import Ground
from stillground.operators.straight_rays import StraightRays
from stillground.physics import first_arrivals
from stillground.physics.path_density import path_density
from stillground.physics.shot_section import shot_section
from stillground.protocols import Array, Extra, Integers, Kind, Measurement, Scene
from stillground.protocols import Field as GroundField
from stillground.survey import Section, read_surface, require_file
from stillground.survey.quantities import InputPath, Length

# Prior standard deviation of the anisotropy: sediments seldom pass a tenth (common practice, no source).
_ANISOTROPY = 0.1
# Positions may stand this far above the surface, as on a tripod, m.
_ABOVE = 2.0


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


@dataclass(frozen=True, kw_only=True)
class RayScene(Scene):
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
    anisotropy : bool
        Whether it is fitted.
    """

    section: Section
    starts: Array
    ends: Array
    lengths: Array
    data: Array
    errors: Array
    groupings: dict[str, Integers]
    anisotropy: bool

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

    def coverage(self, grid: Grid, correlation: tuple[float, ...], rays: Sequence[Array] = ()) -> GroundField:
        """Length of ray in a unit of area, m-1, as `path_density`."""
        return path_density(grid, self.starts, self.ends, correlation, self.lengths)

    def predict(self, ground: Ground) -> Array:
        """Times through a described ground of slowness, shape (n_data,), s."""
        times = ground.line_integrals(self.starts, self.ends)
        return np.asarray(times * self.lengths / np.linalg.norm(self.ends - self.starts, axis=1))

    def trace(self, distance: Array) -> tuple[Array, Array]:
        """East and north of distances along the section, m."""
        return self.section.plan(distance)


class StraightRay(Kind):
    """First arrivals between boreholes, or along and across one, where rays are nearly straight."""

    name = "straight-ray"
    ground_property = first_arrivals.SLOWNESS
    columns = first_arrivals.COLUMNS
    datum = "time"
    datum_units = "s"
    axes = ("distance", "elevation")
    # Of a line in two dimensions: (1 - d) / 2.
    regularity = -0.5
    Settings = StraightRaySettings
    Plan = first_arrivals.ShotPlan

    def plan(self, plan: first_arrivals.ShotPlan) -> xr.Dataset | None:
        """Positions of every source with every receiver."""
        return first_arrivals.planned(plan)

    def place(self, survey: xr.Dataset, settings: StraightRaySettings) -> RayScene:
        """Projects a survey on its section.

        Raises
        ------
        SurveyError
            When positions lie too far off the section, all in one place in plan, a source and a
            receiver on the same point of it, or times are far slower than any ground.
        """
        placed = shot_section(survey, settings.out_of_plane)
        starts, ends, lengths = placed.starts, placed.ends, placed.lengths
        span, everywhere = ends - starts, placed.everywhere
        first_arrivals.require_waves(survey, lengths)
        data, errors = first_arrivals.times(survey)
        surface = None
        if settings.surface is not None:
            require_file(settings.surface, "physics.surface")
            surface = read_surface(settings.surface, placed.section, placed.corridor)
            _require_below(settings.surface, surface, everywhere)
        return RayScene(
            lower=tuple(everywhere.min(axis=0).tolist()),
            upper=tuple(everywhere.max(axis=0).tolist()),
            positions=placed.positions,
            apparent=data / lengths,
            against={
                "offset (m)": placed.across,
                "ray angle (degrees above level)": np.degrees(np.arctan2(span[:, 1], np.abs(span[:, 0]))),
            },
            paths=(starts, ends),
            surface=surface,
            facts=(
                placed.fact,
                *first_arrivals.facts(survey, lengths),
            ),
            doubts=(*first_arrivals.doubts(survey, lengths), *_above(surface, everywhere)),
            inputs=() if settings.surface is None else (settings.surface,),
            section=placed.section,
            starts=starts,
            ends=ends,
            lengths=lengths,
            data=data,
            errors=errors,
            groupings=placed.groupings,
            anisotropy=settings.anisotropy == "fit",
        )


def _above(surface: tuple[Array, Array] | None, places: Array) -> tuple[str, ...]:
    if surface is None:
        return ()
    above = int(np.sum(places[:, 1] > np.interp(places[:, 0], *surface) + 0.1))
    standing = counted(above, "position of the table stands", "positions of the table stand")
    said = f"{standing} above the surface: z is elevation, up"
    return (said,) if above else ()


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
