"""Evenly spaced places on a straight line, as a planned survey names them."""

from __future__ import annotations

from typing import Annotated

import numpy as np
from pydantic import BaseModel, ConfigDict, Field, Strict

from stillground.protocols import Array
from stillground.survey.quantities import Coordinate


class Places(BaseModel):
    """Evenly spaced places on a straight line, both ends included."""

    model_config = ConfigDict(extra="forbid", frozen=True)

    first: tuple[Coordinate, Coordinate, Coordinate] = Field(description="x, y, z of the first")
    last: tuple[Coordinate, Coordinate, Coordinate] = Field(description="x, y, z of the last")
    count: Annotated[int, Strict()] = Field(ge=1, le=100_000)

    def positions(self) -> Array:
        """x, y, z of all places, shape (count, 3), m."""
        first, last = np.array(self.first), np.array(self.last)
        # Tables hold millimetres: the data are computed for the places that the table will name.
        return np.asarray(np.round(first + np.linspace(0, 1, self.count)[:, None] * (last - first), 3))
