"""Inner products column by column: all that the iterations need beyond products and sums."""

from __future__ import annotations

import numpy as np

from stillground.protocols import Array


def inner(u: Array, v: Array) -> Array:
    """Inner products of the columns of ``u`` and ``v``, shapes (n, k), to shape (k,)."""
    return np.asarray(np.einsum("ij,ij->j", u, v))


def norm(u: Array) -> Array:
    """Norms of the columns of ``u``, shape (n, k), to shape (k,)."""
    return np.sqrt(inner(u, u))


def ratio(above: Array, below: Array) -> Array:
    """``above / below`` with zero where ``below`` is: a column that has ended stands still."""
    return np.divide(above, below, out=np.zeros_like(above), where=below != 0)


def frozen(u: Array) -> Array:
    """A read-only copy."""
    copy = u.copy()
    copy.flags.writeable = False
    return copy
