"""Kaczmarz' iteration by blocks of data: all of some sources at a time."""

from __future__ import annotations

from collections.abc import Iterator

from pylops import LinearOperator

from stillground.protocols import Array, Iterate
from stillground.solve.blocks import Order, interleaved, prepared, sequence, sweeps


def block_kaczmarz(
    operator: LinearOperator,
    b: Array,
    *,
    groups: int = 5,
    ridge: float = 1.0,
    relaxation: float = 1.0,
    order: Order = "golden",
    seed: int = 0,
) -> Iterator[Iterate]:
    """Iterates of block Kaczmarz from zero, one sweep over all blocks each; endless.

    Parameters
    ----------
    operator : pylops.LinearOperator, shape (n_data, n_unknowns)
        It must offer `stillground.protocols.RowBlocks`; its bounds are kept after every sweep.
    b : array, shape (n_data, n_columns)
    groups : int
        Blocks, of interleaved sources: neighbours, whose rays are nearly the same, fall into
        different ones.
    ridge : float
        In units of the mean squared row norm. Without it the nearly dependent rows of a source ruin
        the answer, which settles all the same.
    relaxation : float
        Between 0 and 2.
    order : "cyclic", "random" or "golden"
    seed : int
        Of the random order.

    Returns
    -------
    iterator of Iterate

    Notes
    -----
    For one block B after the other,
    ``x += relaxation A_B^T (A_B A_B^T + ridge tr I)^-1 (b_B - A_B x)``.

    References
    ----------
    Elfving (1980), Block-iterative methods for consistent and inconsistent linear equations, Numer. Math.
    35. Eggermont, Herman & Lent (1981), Iterative algorithms for large partitioned linear systems, Linear
    Algebra Appl. 40.
    """
    parts = prepared(operator, interleaved(operator, groups), ridge)

    def sweep(x: Array, dual: Array, number: int) -> None:
        for k in sequence(len(parts), order, seed + number):
            part = parts[k]
            step = relaxation * part.step(b[part.index] - part.operator.matmat(x))
            x += part.operator.rmatmat(step)
            dual[part.index] += step

    return sweeps(operator, b, sweep)


block_kaczmarz.keeps_bounds = True  # type: ignore[attr-defined]
