"""Data taken along a line on the surface as curves, one for each source: times against distance."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from stillground.products.raster import Surface
from stillground.protocols import Array, Integers

# Buried shots belong to the curves, boreholes do not: how deep places may lie, of the length of the line.
_BURIED = 0.05
_FEWEST = 3
# More would hide each other.
_MOST_DRAWN = 40


@dataclass(frozen=True)
class DataCurves:
    """Curves of a survey; data in the unit of its table.

    Parameters
    ----------
    of, along : str
        What each curve belongs to, and what stands along it, as "source" and "receiver".
    datum, unit : str
        Name of the data, and their unit.
    starts : array, shape (n_curves,)
        Distance of each source along the line, m.
    number : array of integers, shape (n_kept,)
        The curve of each datum.
    distance : array, shape (n_kept,)
        Of each datum's receiver along the line, m.
    observed, errors : array, shape (n_kept,)
        Errors are NaN where they are not known.
    predicted : array, shape (n_kept,), or None
        What the answer gives; None before there is one.
    light : array of bool, shape (n_kept,)
        Which data count less than half.
    """

    of: str
    along: str
    datum: str
    unit: str
    starts: Array
    number: Integers
    distance: Array
    observed: Array
    errors: Array
    predicted: Array | None
    light: NDArray[np.bool_]

    @property
    def name(self) -> str:
        """Of their figure, as ``time_distance``."""
        return f"{self.datum.replace(' ', '_')}_distance"

    @property
    def numbers(self) -> Integers:
        """Curves that have data, by the distance of their sources."""
        held = np.unique(self.number)
        return np.asarray(held[np.argsort(self.starts[held], kind="stable")])

    @property
    def drawn(self) -> Integers:
        """Those of `numbers` that pictures show: of many, every so many."""
        return self.numbers[:: -(-self.numbers.size // _MOST_DRAWN)]

    def branches(self, number: int) -> Iterator[Integers]:
        """Data of a curve on each side of its source, by ascending distance."""
        mine = np.flatnonzero(self.number == number)
        mine = mine[np.argsort(self.distance[mine], kind="stable")]
        right = self.distance[mine] >= self.starts[number]
        for side in (mine[~right], mine[right]):
            if side.size:
                yield side


def data_curves(
    *,
    groupings: Mapping[str, Integers],
    positions: Mapping[str, Array],
    surface: Surface | None,
    datum: str,
    unit: str,
    si_factor: float,
    observed: Array,
    errors: Array,
    predicted: Array | None = None,
    weights: Array | None = None,
) -> DataCurves | None:
    """The curves of a survey, of those data whose both ends are along the surface.

    Parameters
    ----------
    groupings : mapping of str to array of integers, shape (n_data,)
        As in Measurement: a curve for each group of the first that has places, along those of the second.
    positions : mapping of str to array, shape (n_groups, n_axes)
        Where the groups stand, m.
    surface : pair of arrays (distance, elevation), m, or None
    datum, unit, si_factor
        As for `fit_table`.
    observed, errors, predicted, weights : array, shape (n_data,)
        In SI; ``weights`` are 1 but for outliers.

    Returns
    -------
    DataCurves or None
        None without a surface, where data do not lie between two places of a section, or no source has
        three receivers along the line.
    """
    placed = [name for name in groupings if name in positions and positions[name].shape[1] == 2]
    if surface is None or len(placed) < 2:
        return None
    of, along = placed[:2]
    ends = [positions[name][groupings[name]] for name in (of, along)]
    everywhere = np.vstack(ends)
    depth = np.interp(everywhere[:, 0], *surface) - everywhere[:, 1]
    buried = np.abs(depth) > _BURIED * np.ptp(everywhere[:, 0])
    kept = ~buried.reshape(2, -1).any(axis=0)
    pairs = np.unique(np.column_stack([groupings[of], groupings[along]])[kept], axis=0)
    if not kept.any() or np.bincount(pairs[:, 0]).max() < _FEWEST:
        return None
    return DataCurves(
        of=of,
        along=along,
        datum=datum,
        unit=unit,
        starts=positions[of][:, 0],
        number=groupings[of][kept],
        distance=ends[1][kept, 0],
        observed=observed[kept] / si_factor,
        errors=errors[kept] / si_factor,
        predicted=None if predicted is None else predicted[kept] / si_factor,
        light=np.zeros(kept.sum(), dtype=bool) if weights is None else weights[kept] < 0.5,
    )
