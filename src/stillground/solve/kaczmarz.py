"""Kaczmarz' row-action iteration: one datum after the other."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
from pylops import LinearOperator

from stillground.protocols import Array, Iterate
from stillground.solve.blocks import Order, require_rows, sequence, sweeps
from stillground.solve.gram import BATCH


def kaczmarz(
    operator: LinearOperator, b: Array, *, order: Order = "golden", relaxation: float = 1.0, seed: int = 0
) -> Iterator[Iterate]:
    """Iterates of Kaczmarz' method from zero, one sweep over all data each; endless.

    All rows are held: making them anew for every sweep would cost more than the sweep.

    Parameters
    ----------
    operator : pylops.LinearOperator, shape (n_data, n_unknowns)
        It must offer `stillground.protocols.RowBlocks`; its bounds are kept after every sweep.
    b : array, shape (n_data, n_columns)
    order : "cyclic", "random" or "golden"
        Random draws a new order each sweep.
    relaxation : float
        Between 0 and 2.
    seed : int
        Of the random order.

    Returns
    -------
    iterator of Iterate

    Notes
    -----
    For one datum after the other, ``x += relaxation (b_i - a_i . x) / |a_i|^2 a_i``.

    References
    ----------
    Kaczmarz (1937), Angenäherte Auflösung von Systemen linearer Gleichungen, Bull. Int. Acad. Pol. Sci.
    Lett. A 35. Strohmer & Vershynin (2009), A randomized Kaczmarz algorithm with exponential
    convergence, J. Fourier Anal. Appl. 15 (random order; here every datum once a sweep).
    """
    require_rows(operator)
    n_data = operator.shape[0]
    rows = np.empty(operator.shape)
    for start in range(0, n_data, BATCH):
        index = np.arange(start, min(start + BATCH, n_data))
        rows[index] = operator.rows(index).rmatmat(np.eye(index.size)).T
    squares = np.einsum("ij,ij->i", rows, rows)

    def sweep(x: Array, dual: Array, number: int) -> None:
        for i in sequence(n_data, order, seed + number):
            if squares[i] > 0:
                step = relaxation * (b[i] - rows[i] @ x) / squares[i]
                x += np.outer(rows[i], step)
                dual[i] += step

    return sweeps(operator, b, sweep)


kaczmarz.keeps_bounds = True  # type: ignore[attr-defined]
kaczmarz.holds_rows = True  # type: ignore[attr-defined]
