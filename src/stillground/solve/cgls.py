"""Conjugate gradients on the normal equations."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
from pylops import LinearOperator

from stillground.protocols import Array, Iterate
from stillground.solve.columns import frozen, inner, norm, ratio


def cgls(operator: LinearOperator, b: Array) -> Iterator[Iterate]:
    """Iterates of CGLS from zero; ends where the gradient vanishes to rounding.

    Parameters
    ----------
    operator : pylops.LinearOperator, shape (n_data, n_unknowns)
    b : array, shape (n_data, n_columns)
        Independent problems that share the products.

    Yields
    ------
    Iterate

    References
    ----------
    Hestenes & Stiefel (1952), Methods of conjugate gradients for solving linear systems, J. Res. Natl.
    Bur. Stand. 49. Björck (1996), Numerical Methods for Least Squares Problems, algorithm 7.4.1.
    """
    x = np.zeros((operator.shape[1], b.shape[1]))
    r = b.copy()
    s = operator.rmatmat(r)
    p = s.copy()
    gamma = inner(s, s)
    floor = np.finfo(float).eps * np.sqrt(gamma[0])
    index = 0
    while True:
        yield Iterate(index, frozen(x), frozen(r), float(norm(s)[0]))
        if np.sqrt(gamma[0]) <= floor:
            return
        q = operator.matmat(p)
        alpha = ratio(gamma, inner(q, q))
        x += alpha * p
        r -= alpha * q
        s = operator.rmatmat(r)
        before, gamma = gamma, inner(s, s)
        p = s + ratio(gamma, before) * p
        index += 1
