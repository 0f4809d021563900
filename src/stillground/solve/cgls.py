"""Conjugate gradients on the normal equations."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
from pylops import LinearOperator

from stillground.protocols import Array, Iterate
from stillground.solve.columns import frozen, inner, norm, ratio

_ROUNDING = 1e-6


def cgls(operator: LinearOperator, b: Array, *, reorthogonal: bool = True) -> Iterator[Iterate]:
    """Iterates of CGLS from zero; ends where the gradient vanishes to rounding.

    Parameters
    ----------
    operator : pylops.LinearOperator, shape (n_data, n_unknowns)
    b : array, shape (n_data, n_columns)
        Independent problems that share the products.
    reorthogonal : bool
        Keep what the operator makes of the directions orthogonal, at one product more an iteration.
        Without it the iterates leave those of LSQR after some ten iterations where singular values
        fall fast.

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
    # The last row of data-side vectors follows their polynomials at zero: q(0) comes with q(A A^T) b.
    one = np.ones((1, b.shape[1]))
    p_dual = np.vstack([r, one])
    dual = np.zeros_like(p_dual)
    gamma = inner(s, s)
    floor = np.finfo(float).eps * np.sqrt(gamma)
    # What the operator made of earlier directions, normalised, and these directions in the data.
    seen, known = np.empty((b.shape[1], 0, b.shape[0])), np.empty((b.shape[1], 0, b.shape[0] + 1))
    index = 0
    while True:
        yield Iterate(index, frozen(x), frozen(r), norm(s), frozen(dual[:-1]), frozen(dual[-1]))
        if (np.sqrt(gamma) <= floor).all():
            return
        q = operator.matmat(p)
        if reorthogonal:
            common = np.matmul(seen, q.T[:, :, None]).swapaxes(1, 2)
            before = norm(q)
            q = q - np.matmul(common, seen)[:, 0].T
            # Nothing but rounding left tells that the space is used up: such a column stands still.
            going = norm(q) > _ROUNDING * before
            if not going.any():
                return
            q = q * going
            p_dual = p_dual - np.matmul(common, known)[:, 0].T
            p = operator.rmatmat(p_dual[:-1])
            size = ratio(np.ones_like(gamma), norm(q))
            seen = np.concatenate([seen, (q * size).T[:, None]], axis=1)
            known = np.concatenate([known, (p_dual * size).T[:, None]], axis=1)
            gamma = inner(q, r)
        alpha = ratio(gamma, inner(q, q))
        x += alpha * p
        dual += alpha * p_dual
        r -= alpha * q
        s = operator.rmatmat(r)
        before, gamma = gamma, inner(s, s)
        beta = ratio(gamma, before)
        p = s + beta * p
        p_dual = np.vstack([r, one]) + beta * p_dual
        index += 1
