"""The minimum of a curve over iterations, and how sharp it is: what several rules look for."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from stillground.protocols import Array, History, Pick

_NEAR = 1.01


@dataclass(frozen=True)
class Minimum:
    """Where a curve is lowest, between iterations by the parabola through the neighbours.

    ``near`` are the first and last iteration within 1 % of the lowest value, ``last`` that of the curve.
    """

    iteration: float
    near: tuple[int, int]
    last: int

    @property
    def at_end(self) -> bool:
        """The curve still falls at its last iteration."""
        return self.iteration >= self.last

    @property
    def sharp(self) -> bool:
        """The curve leaves its minimum within half as many iterations again, before its end."""
        return self.near[1] <= 1.5 * max(self.near[0], 1) and self.near[1] < self.last

    @property
    def span(self) -> str:
        """In words."""
        return f"within 1 % of its minimum from iteration {self.near[0]} to {self.near[1]}"


def minimum(curve: Array, first: int = 0) -> Minimum:
    """The lowest place of a positive curve, shape (n_rows,), from row ``first`` on."""
    k = first + int(np.argmin(curve[first:]))
    place = float(k)
    if first < k < curve.size - 1:
        before, here, after = curve[k - 1 : k + 2]
        bend = before - 2 * here + after
        if np.isfinite(bend) and bend > 0:
            place += float(0.5 * (before - after) / bend)
    near = first + np.flatnonzero(curve[first:] <= _NEAR * curve[k])
    return Minimum(place, (int(near[0]), int(near[-1])), curve.size - 1)


def still_falling(history: History) -> Pick:
    """No pick, since the curve is lowest at its end."""
    return Pick(None, False, f"still falling at the last iteration, {history.last}: {history.advice}")
