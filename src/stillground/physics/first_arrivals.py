"""What kinds that measure first arrivals share: sources, receivers, times, and surveys only planned."""

from __future__ import annotations

from typing import Any, Self

import numpy as np
import xarray as xr
from pydantic import BaseModel, ConfigDict, Field, model_validator

from stillground.counted import counted
from stillground.errors import SurveyError
from stillground.protocols import Array, GroundProperty
from stillground.survey import source_of
from stillground.survey.faults import label
from stillground.survey.places import Places

SLOWNESS = GroundProperty(
    "slowness",
    "s m-1",
    "slowness of the first arrival",
    ("velocity", "m s-1", "velocity of the first arrival"),
)
COLUMNS = ("source_x", "source_y", "source_z", "receiver_x", "receiver_y", "receiver_z", "time")
ENDS = ("source", "receiver")

# Seismic velocities of the ground, m s-1: from loose dry soil to the hardest rock, both with room
# (common practice, no source).
PLAUSIBLE = (50, 10_000)
_LARGE_ERROR = 0.3
# Below this part of the slowest a whole survey is no slow ground but another unit.
_TOO_SLOW = 0.1


class ShotPlan(BaseModel):
    """Sources and receivers of a survey that is only planned: every source with every receiver."""

    model_config = ConfigDict(extra="forbid", frozen=True)

    sources: Places | None = Field(None, description="default: the places of survey.files")
    receivers: Places | None = None

    @model_validator(mode="after")
    def _both_or_none(self) -> Self:
        if (self.sources is None) != (self.receivers is None):
            raise ValueError("give sources and receivers, or neither for the places of survey.files")
        return self


def planned(plan: ShotPlan) -> xr.Dataset | None:
    """The positions of a plan, one row a pair; None where it has none."""
    if plan.sources is None or plan.receivers is None:
        return None
    here, there = plan.sources.positions(), plan.receivers.positions()
    pairs = (np.repeat(here, len(there), axis=0), np.tile(there, (len(here), 1)))
    variables = {
        f"{end}_{axis}": ("datum", places[:, i])
        for end, places in zip(ENDS, pairs, strict=True)
        for i, axis in enumerate("xyz")
    }
    return xr.Dataset(variables)


def ends(survey: xr.Dataset) -> tuple[Array, Array]:
    """Sources and receivers in space, x y z, shape (n_data, 3) each."""
    source, receiver = (np.column_stack([survey[f"{end}_{axis}"].values for axis in "xyz"]) for end in ENDS)
    return source, receiver


def times(survey: xr.Dataset) -> tuple[Array, Array]:
    """Times and their errors, s; ones where a survey is only planned."""
    time, error = (_values(survey, name) for name in ("time", "time_error"))
    return time, error


def require_waves(survey: xr.Dataset, lengths: Array) -> None:
    """Refuses times so late over ways of ``lengths``, m, that their unit must be another.

    Raises
    ------
    SurveyError
        When the median apparent velocity is below a tenth of the slowest plausible one.
    """
    if "time" not in survey:
        return
    time, slowest = survey["time"], PLAUSIBLE[0]
    median = float(np.median(lengths / time.values))
    if median < _TOO_SLOW * slowest:
        unit = time.attrs.get("original_units", time.attrs.get("units", "s"))
        raise SurveyError(
            source_of(survey),
            [
                f"{label(time)} is taken in {unit}, which makes the median apparent velocity "
                f"{median:.3g} m s-1, where the slowest ground has some {slowest}; check its unit, and that "
                f"of the positions"
            ],
        )


def facts(survey: xr.Dataset, lengths: Array) -> tuple[str, ...]:
    """The range of apparent velocities over ways of ``lengths``, m; nothing of a planned survey."""
    if "time" not in survey:
        return ()
    low, middle, high = np.quantile(lengths / survey["time"].values, [0.0, 0.5, 1.0])
    return (f"apparent velocities {low:.4g} to {high:.4g} m s-1, median {middle:.4g}",)


def doubts(survey: xr.Dataset, lengths: Array) -> tuple[str, ...]:
    """Times and errors that look wrong and may not be; nothing of a planned survey."""
    if "time" not in survey:
        return ()
    time, said = survey["time"].values, []
    slowest, fastest = PLAUSIBLE
    odd = int(np.sum((lengths < slowest * time) | (lengths > fastest * time)))
    if odd:
        said.append(
            f"{counted(odd, 'apparent velocity lies', 'apparent velocities lie')} outside {slowest} to "
            f"{fastest} m s-1: is the unit of time right?"
        )
    relative = np.median(survey["time_error"].values / time) if "time_error" in survey else 0.0
    if relative > _LARGE_ERROR:
        said.append(f"errors are {relative:.2g} times the data: are the columns or units mixed up?")
    return tuple(said)


def _values(survey: xr.Dataset, name: str) -> Any:
    return survey[name].values if name in survey else np.ones(survey.sizes["datum"])
