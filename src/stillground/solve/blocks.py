"""The order and the parts in which Kaczmarz' methods go through the data."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from typing import Literal

import numpy as np
from pylops import LinearOperator
from scipy.linalg import LinAlgError, cho_factor, cho_solve

from stillground.errors import ConfigError
from stillground.protocols import Array, Integers, Iterate, RowBlocks
from stillground.solve.columns import frozen
from stillground.solve.gram import gram

Order = Literal["cyclic", "random", "golden"]

_GOLDEN = (np.sqrt(5) - 1) / 2


def sequence(n: int, order: Order, seed: int) -> Integers:
    """The order of one sweep over n parts.

    ``golden`` takes steps of the golden section, rounded to a stride without a factor in common with
    n: parts that follow each other are far apart.

    Examples
    --------
    >>> sequence(5, "golden", 0).tolist()
    [0, 3, 1, 4, 2]
    """
    if order == "random":
        return np.random.default_rng(seed).permutation(n)
    stride = 1
    if order == "golden":
        stride = max(round(n * _GOLDEN), 1)
        while np.gcd(stride, n) != 1:
            stride += 1
    return (np.arange(n) * stride) % n


def interleaved(operator: LinearOperator, groups: int) -> list[Integers]:
    """Parts of the data: every ``groups``-th source, or whatever the first grouping is, together.

    Raises
    ------
    ConfigError
        When the operator does not offer rows, or has no groupings.
    """
    require_rows(operator)
    grouping = next(iter(operator.groupings.values()), None)
    if grouping is None:
        raise ConfigError(
            "solver.method: a block method needs data in groups, as by source; this measurement has none"
        )
    return [part for k in range(groups) if (part := np.flatnonzero(grouping % groups == k)).size]


def require_rows(operator: LinearOperator) -> None:
    """Raises `ConfigError` when an operator does not offer `RowBlocks`."""
    if not isinstance(operator, RowBlocks):
        raise ConfigError(
            "solver.method: Kaczmarz' methods need the data by parts, which this operator does not offer"
        )


def sweeps(
    operator: LinearOperator, b: Array, sweep: Callable[[Array, Array, int], None]
) -> Iterator[Iterate]:
    """Iterates from zero, one sweep each, within the operator's bounds; endless.

    ``sweep(x, dual, number)`` goes once through the data and changes ``x`` and ``dual`` in place. With
    bounds no vector of data belongs to the solution any more, and the iterates have none.
    """
    x, dual = np.zeros((operator.shape[1], b.shape[1])), np.zeros_like(b)
    index = 0
    yield Iterate(0, frozen(x), frozen(b), dual=frozen(dual))
    while True:
        sweep(x, dual, index)
        clipped = operator.clip(x)
        free = clipped is x
        x = clipped if free else clipped.copy()
        index += 1
        yield Iterate(index, frozen(x), frozen(b - operator.matmat(x)), dual=frozen(dual) if free else None)


class Part:
    """Some data with what their step needs: ``(G + ridge tr I)^-1`` with G their Gram matrix.

    tr is the mean squared row norm of all data, so that the ridge has no unit.
    """

    def __init__(self, operator: LinearOperator, index: Integers) -> None:
        self.index = index
        self.operator = operator.rows(index)
        self.gram = gram(self.operator)

    def prepare(self, ridge: float) -> None:
        """Factors the Gram matrix with ``ridge`` on its diagonal; `ConfigError` where that is singular."""
        try:
            self._factor = cho_factor(self.gram + ridge * np.eye(self.index.size))
        except LinAlgError as error:
            raise ConfigError(
                "solver.ridge: too small, the data of a block depend on each other, as repeated ones do; "
                "take 1, or more"
            ) from error

    def step(self, residual: Array) -> Array:
        """``(G + ridge I)^-1 r``, shape (n_part, n_columns)."""
        return np.asarray(cho_solve(self._factor, residual))


def prepared(operator: LinearOperator, parts: list[Integers], ridge: float) -> list[Part]:
    """Parts ready to step, with ``ridge`` in units of the mean squared row norm of all data."""
    made = [Part(operator, index) for index in parts]
    mean = sum(float(np.trace(part.gram)) for part in made) / operator.shape[0]
    for part in made:
        part.prepare(ridge * mean)
    return made
