"""Symmetric sweeps of block Kaczmarz, sped up by conjugate gradients."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
from pylops import LinearOperator

from stillground.protocols import Array, Iterate
from stillground.solve.blocks import interleaved, prepared
from stillground.solve.columns import frozen, inner, ratio


def symmetric_kaczmarz(
    operator: LinearOperator, b: Array, *, groups: int = 5, ridge: float = 30.0
) -> Iterator[Iterate]:
    """Iterates of conjugate gradients on symmetric sweeps from zero, one sweep there and back each.

    Parameters
    ----------
    operator : pylops.LinearOperator, shape (n_data, n_unknowns)
        It must offer `stillground.protocols.RowBlocks` and have no bounds.
    b : array, shape (n_data, n_columns)
    groups : int
        Blocks of interleaved sources.
    ridge : float
        In units of the mean squared row norm.

    Yields
    ------
    Iterate

    Notes
    -----
    With S(x, b) a sweep over the blocks and back, its fixed point solves ``(I - Q) x = S(0, b)``,
    ``Q x = S(x, 0)``; ``I - Q`` is symmetric and semidefinite, so conjugate gradients apply.

    References
    ----------
    Björck & Elfving (1979), Accelerated projection methods for computing pseudoinverse solutions of
    systems of linear equations, BIT 19.
    """
    parts = prepared(operator, interleaved(operator, groups), ridge)

    def sweep(x: Array, data: Array) -> Array:
        x = x.copy()
        for part in [*parts, *parts[::-1]]:
            step = part.step(data[part.index] - part.operator.matmat(x))
            x += part.operator.rmatmat(step)
        return x

    x, nothing = np.zeros((operator.shape[1], b.shape[1])), np.zeros_like(b)
    residual = b.copy()
    r = sweep(x, b)
    p = r.copy()
    gamma = inner(r, r)
    floor = np.finfo(float).eps ** 2 * gamma
    index = 0
    while True:
        yield Iterate(index, frozen(x), frozen(residual))
        if (gamma <= floor).all():
            return
        q = p - sweep(p, nothing)
        alpha = ratio(gamma, inner(p, q))
        x += alpha * p
        r -= alpha * q
        residual = b - operator.matmat(x)
        before, gamma = gamma, inner(r, r)
        p = r + ratio(gamma, before) * p
        index += 1
