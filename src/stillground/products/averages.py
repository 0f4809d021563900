"""Averages that practice asks for, as people read them: of velocity where the property is slowness."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from stillground.products.reading import read_as, shown, shown_change
from stillground.products.units import with_unit
from stillground.protocols import Result


@dataclass(frozen=True)
class ReadAverage:
    """An average with its errors in the unit that people read: what of, over what, how much.

    The reciprocal of a mean, as of slowness over depth, is itself averaged over the time on the way.
    """

    over: str
    of: str
    units: str
    value: float
    noise_part: float
    total_error: float | None

    @property
    def sentence(self) -> str:
        """One line for people, with the error that is known best.

        Examples
        --------
        >>> ReadAverage("down to 30 m", "velocity", "m s-1", 1414.2, 0.71, 2.31).sentence
        'average velocity down to 30 m: 1414 m s-1, ± 2.3 (total error)'
        """
        error, kind = self.noise_part, "noise part of the error"
        if self.total_error is not None:
            error, kind = self.total_error, "total error"
        bar = "" if math.isnan(error) else f", ± {error:.2g} ({kind})"
        value = with_unit(f"{self.value:.4g}", self.units)
        return f"average {self.of} {self.over}: {value}{bar}"


def read_averages(result: Result) -> tuple[ReadAverage, ...]:
    """All averages of a result as people read them."""
    seen = result.property
    found = []
    for over, mean in result.averages.items():
        value = np.array(mean.value)
        noise_part, total_error = (
            None if error is None else float(shown_change(seen, value, np.array(error)))
            for error in (mean.noise_part, mean.total_error)
        )
        assert noise_part is not None
        read = float(shown(seen, value)[0])
        name, units = read_as(seen)
        found.append(ReadAverage(over, name.replace("_", " "), units, read, noise_part, total_error))
    return tuple(found)
