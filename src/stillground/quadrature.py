"""Composite quadrature rules on even intervals: a rule *is* where its nodes stand and their weights."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from stillground.errors import GridError

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Quadrature:
    """A rule that is repeated panel by panel.

    Parameters
    ----------
    name : str
    intervals : int
        Of the grid in a panel.
    places : tuple of float
        Nodes in a panel that goes from 0 to 1, ascending. With both 0 and 1 among them, panels share
        the nodes at their ends.
    shares : tuple of float
        Weights of the nodes in a panel, of sum 1.

    References
    ----------
    Davis & Rabinowitz (1984), Methods of Numerical Integration, chapter 2.

    Examples
    --------
    >>> RULES["simpson"].weights(5) * 3
    array([1., 4., 2., 4., 1.])
    >>> RULES["gauss-2"].nodes(4).round(3)
    array([0.211, 0.789, 1.211, 1.789])
    """

    name: str
    intervals: int
    places: tuple[float, ...]
    shares: tuple[float, ...]

    @property
    def even(self) -> bool:
        """Whether nodes are the ends of the grid's intervals: finer rungs then hold coarser ones' nodes."""
        return self.places[0] == 0.0

    def n_nodes(self, intervals: int) -> int:
        """Nodes on so many intervals.

        Raises
        ------
        GridError
            When the intervals are no whole number of panels.
        """
        if intervals % self.intervals:
            raise GridError(
                f"{self.name} takes {self.intervals} intervals at a time; {intervals} do not divide"
            )
        return intervals // self.intervals * self._step + self.even

    def n_intervals(self, n_nodes: int) -> int:
        """Intervals that so many nodes stand on; errors as `n_nodes`."""
        panels, left = divmod(n_nodes - self.even, self._step)
        if left:
            raise GridError(f"{self.name} has {self._step} new nodes a panel; {n_nodes} nodes do not fit")
        return panels * self.intervals

    def nodes(self, n_nodes: int) -> Array:
        """Places of the nodes in intervals from the first end, shape (n_nodes,)."""
        panels = np.arange(0, self.n_intervals(n_nodes), self.intervals)
        inside = self.intervals * np.array(self.places[: self._step])
        along = (panels[:, None] + inside).reshape(-1)
        return np.append(along, float(self.n_intervals(n_nodes))) if self.even else along

    def weights(self, n_nodes: int) -> Array:
        """Weights of the nodes in intervals, shape (n_nodes,), of sum ``n_intervals(n_nodes)``."""
        panels = self.n_intervals(n_nodes) // self.intervals
        found = np.zeros(n_nodes)
        for place, share in enumerate(self.shares):
            found[place :: self._step][:panels] += self.intervals * share
        return found

    @property
    def _step(self) -> int:
        """Nodes that a panel adds."""
        return len(self.places) - self.even


def _gauss(n: int) -> Quadrature:
    places, weights = np.polynomial.legendre.leggauss(n)
    return Quadrature(f"gauss-{n}", 1, tuple(((1 + places) / 2).tolist()), tuple((weights / 2).tolist()))


TRAPEZOID = Quadrature("trapezoid", 1, (0.0, 1.0), (0.5, 0.5))

RULES = {
    rule.name: rule
    for rule in (
        TRAPEZOID,
        Quadrature("simpson", 2, (0.0, 0.5, 1.0), (1 / 6, 2 / 3, 1 / 6)),
        _gauss(2),
        _gauss(3),
    )
}
"""All rules by name."""
