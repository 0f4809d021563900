"""LSQR with the data-side vectors kept orthogonal: the default iteration."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
from pylops import LinearOperator

from stillground.protocols import Array, Iterate
from stillground.solve.columns import frozen, norm, ratio

_GROWTH = 1e-12


def lsqr(operator: LinearOperator, b: Array, *, reorthogonal: bool = True) -> Iterator[Iterate]:
    """Iterates of LSQR from zero, in exact arithmetic those of CGLS; ends when all spaces are used up.

    Parameters
    ----------
    operator : pylops.LinearOperator, shape (n_data, n_unknowns)
    b : array, shape (n_data, n_columns)
        Independent problems that share the products.
    reorthogonal : bool
        Keep the data-side vectors orthogonal: n_iterations x n_data numbers.

    Yields
    ------
    Iterate

    Notes
    -----
    Golub-Kahan bidiagonalisation; each new data-side vector is orthogonalised against all before it.
    Without that the vectors lose orthogonality where singular
    values fall fast, and the differences between rungs of a ladder turn random. The other side is
    left alone; where it has lost its orthogonality too, as beyond the rank of an operator with
    repeated rows, the next step would make the residual grow, and the iteration ends before it.

    References
    ----------
    Paige & Saunders (1982), LSQR: an algorithm for sparse linear equations and sparse least squares,
    ACM Trans. Math. Softw. 8. Simon & Zha (2000), Low-rank matrix approximation using the Lanczos
    bidiagonalization process, SIAM J. Sci. Comput. 21 (orthogonalising one side is enough).
    """
    x = np.zeros((operator.shape[1], b.shape[1]))
    r = b.copy()
    beta = norm(b)
    u = b * ratio(np.ones_like(beta), beta)
    v = operator.rmatmat(u)
    alpha = norm(v)
    v = v * ratio(np.ones_like(alpha), alpha)
    # Data-side vectors q with v = A^T q, and so on; their last row follows their polynomials at zero.
    u_zero = ratio(np.ones_like(beta), beta)
    v_dual = np.vstack([u, u_zero]) * ratio(np.ones_like(alpha), alpha)
    w_dual, dual = v_dual.copy(), np.zeros_like(v_dual)
    yield Iterate(0, frozen(x), frozen(r), alpha * beta, frozen(dual[:-1]), frozen(dual[-1]))

    # One stack of data-side vectors a column, doubled when full.
    basis = np.empty((b.shape[1], 32, b.shape[0]))
    basis[:, 0] = u.T
    w, w_seen = v.copy(), np.zeros_like(u)
    turned_theta, rho_bar, phi_bar = np.zeros_like(alpha), alpha.copy(), beta.copy()
    size = alpha**2
    floor = 10 * np.finfo(float).eps
    index = 0
    while (alpha > floor * np.sqrt(size)).any():
        seen = operator.matmat(v)
        # What the operator makes of the search direction follows from the same product.
        w_seen = seen - turned_theta * w_seen
        u = seen - alpha * u
        known = basis[:, : index + 1]
        for _ in range(2 if reorthogonal else 0):
            u -= np.matmul(np.matmul(known, u.T[:, :, None]).swapaxes(1, 2), known)[:, 0].T
        beta = norm(u)
        u *= ratio(np.ones_like(beta), beta)
        u_zero = -ratio(alpha * u_zero, beta)
        if index + 1 == basis.shape[1]:
            basis = np.concatenate([basis, np.empty_like(basis)], axis=1)
        basis[:, index + 1] = u.T
        v_next = operator.rmatmat(u) - beta * v
        alpha_next = norm(v_next)
        size += beta**2 + alpha_next**2

        rho = np.hypot(rho_bar, beta)
        cosine, sine = ratio(rho_bar, rho), ratio(beta, rho)
        step = ratio(cosine * phi_bar, rho)
        # A residual that would grow tells that rounding has used the space up.
        going = norm(r - step * w_seen) <= (1 + _GROWTH) * norm(r)
        if not going.any():
            return
        step, alpha_next = step * going, alpha_next * going
        w, w_seen, v_next = w * going, w_seen * going, v_next * going
        x += step * w
        dual += step * w_dual
        r -= step * w_seen
        phi_bar = sine * phi_bar
        index += 1
        gradient = phi_bar * alpha_next * abs(cosine)
        yield Iterate(index, frozen(x), frozen(r), gradient, frozen(dual[:-1]), frozen(dual[-1]))
        alpha_next = alpha_next * (beta > floor * np.sqrt(size))
        v = v_next * ratio(np.ones_like(alpha_next), alpha_next)
        v_dual = (np.vstack([u, u_zero]) - beta * v_dual) * ratio(np.ones_like(alpha_next), alpha_next)
        turned_theta = ratio(sine * alpha_next, rho)
        w = v - turned_theta * w
        w_dual = v_dual - turned_theta * w_dual
        rho_bar = -cosine * alpha_next
        alpha = alpha_next
