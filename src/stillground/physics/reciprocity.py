"""What times measured both ways between two places tell of their errors."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.sparse import csr_array

from stillground.counted import counted
from stillground.protocols import Array, ErrorEstimate, Integers

# From fewer pairs the error is known too badly to doubt the given one: to a quarter with eight.
_FEW = 8
_FACTOR = 1.5
# What to say without any.
UNCHECKED = "no pairs measured both ways: the data do not check the errors given"
# Pairs past 5 robust standard deviations are wild; the median of the squares of standard normal numbers.
_WILD, _MEDIAN = 5.0, 0.4549


@dataclass(frozen=True)
class Reciprocity:
    """Errors by pairs measured both ways.

    Parameters
    ----------
    pairs : int
    wild : int
        Pairs that differ so much that one of the two is an outlier; left out.
    constants : bool
        Whether most of the differences are constants of the places, as a late trigger makes them.
    error : float
        Standard deviation of one time, beside such constants, s.
    given : float
        Root mean square of the errors given for the same times, s.
    """

    pairs: int
    wild: int
    constants: bool
    error: float
    given: float

    @property
    def fact(self) -> str:
        left_out = f" ({counted(self.wild, 'wild one', 'wild ones')} left out)" if self.wild else ""
        beside = " by constants of places (errors.statics fits such), beside these" if self.constants else ""
        return (
            f"{self.pairs} pairs measured both ways differ{left_out}{beside} as errors of "
            f"{1e3 * self.error:.3g} ms would make them; given for them are {1e3 * self.given:.3g} ms"
        )

    @property
    def estimate(self) -> ErrorEstimate | None:
        """What it tells of all errors; None from few pairs."""
        return (
            None if self.pairs < _FEW else ErrorEstimate(self.error / self.given, self.constants, self.fact)
        )

    @property
    def doubts(self) -> tuple[str, ...]:
        ratio = self.error / self.given
        if self.pairs < _FEW or 1 / _FACTOR <= ratio <= _FACTOR:
            return ()
        follows = "the misfit cannot come to 1, and errors turn up as ground"
        if ratio < 1:
            follows = "ground that the data show is left out"
        return (
            f"errors by the {self.pairs} pairs measured both ways are {1e3 * self.error:.3g} ms, "
            f"{ratio:.2g} times the {1e3 * self.given:.3g} ms given: with these {follows}; "
            f"check [errors] or the column time_error",
        )


def reciprocity(starts: Array, ends: Array, times: Array, errors: Array) -> Reciprocity | None:
    """Compares times of pairs of places measured both ways; None without any.

    Times of one way that were measured again are averaged first. By reciprocity both ways take equal time,
    so half the mean squared difference is the variance of one time, each difference counted by the
    variance that the given errors lead one to expect. Where a constant for each place explains most of the
    differences, the error is that of the rest.

    Parameters
    ----------
    starts, ends : array, shape (n_data, n_axes), m
        Places are equal to the centimetre.
    times, errors : array, shape (n_data,), s
    """
    n_data = times.size
    _, place = np.unique(np.vstack([starts, ends]).round(2), axis=0, return_inverse=True)
    here, there = place.reshape(2, n_data)
    n_places = int(place.max()) + 1
    way, group, count = np.unique(here * n_places + there, return_inverse=True, return_counts=True)
    mean = np.bincount(group, times) / count
    variance = np.bincount(group, errors**2) / count**2
    back = way % n_places * n_places + way // n_places
    at = np.minimum(np.searchsorted(way, back), way.size - 1)
    # Each pair once.
    both = np.flatnonzero((way[at] == back) & (way < back))
    if not both.size:
        return None
    expected = np.sqrt(variance[both] + variance[at[both]])
    scaled = (mean[both] - mean[at[both]]) / expected
    tame = scaled**2 <= _WILD**2 * np.median(scaled**2) / _MEDIAN
    given = float(np.sqrt(np.mean(errors[np.isin(group, np.r_[both, at[both]])] ** 2)))
    size = float(np.sqrt(np.mean(scaled[tame] ** 2)))
    kept = way[both][tame]
    beside = _beside_constants(scaled[tame], expected[tame], kept // n_places, kept % n_places)
    constants = beside is not None and size > _FACTOR * beside
    error = given * (beside if beside is not None and constants else size)
    return Reciprocity(both.size, int(np.sum(~tame)), constants, error, given)


def _beside_constants(scaled: Array, expected: Array, here: Integers, there: Integers) -> float | None:
    """Root mean square of what a constant for each place leaves of differences; None where that is little."""
    _, place = np.unique(np.r_[here, there], return_inverse=True)
    pair = np.tile(np.arange(scaled.size), 2)
    design = csr_array((np.r_[1 / expected, -1 / expected], (pair, place)))
    solution, _, rank, _ = np.linalg.lstsq((design.T @ design).toarray(), design.T @ scaled)
    left = scaled.size - int(rank)
    if left < _FEW:
        return None
    return float(np.sqrt(np.sum((scaled - design @ solution) ** 2) / left))
