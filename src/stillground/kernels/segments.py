"""Straight pieces in a bilinear nodal field: the weights of the nodes in the mean along one.

Coordinates are in index units on a padded array of two axes, flattened with ``stride`` nodes along
the last. Between two grid lines both local coordinates u, v are linear along the piece, and the mean
of their product is ``mean(u) mean(v) + du dv / 12``: exact.
"""

from __future__ import annotations

import numpy as np
from numba import njit
from numpy.typing import NDArray

Array = NDArray[np.float64]
Integers = NDArray[np.int64]


def room(reach: float) -> int:
    """Entries that a piece of at most ``reach`` index units along either axis may need."""
    return 4 * (2 * int(np.ceil(reach)) + 3)


@njit(nogil=True, cache=True, error_model="numpy")
def mean_weights(
    a0: float, b0: float, a1: float, b1: float, stride: int, nodes: Integers, weights: Array
) -> int:
    """Fill nodes and their weights in the mean over the piece from (a0, b0) to (a1, b1); their number.

    A node of several cells comes several times. A piece of no length gives the value at its place.
    """
    count = 0
    da, db = a1 - a0, b1 - b0
    here = 0.0
    while True:
        # The next grid line along each axis, seen from a little further on.
        there = 1.0
        if da != 0.0:
            a = a0 + here * da
            line = np.floor(a + 1e-9) + 1.0 if da > 0.0 else np.ceil(a - 1e-9) - 1.0
            there = min(there, (line - a0) / da)
        if db != 0.0:
            b = b0 + here * db
            line = np.floor(b + 1e-9) + 1.0 if db > 0.0 else np.ceil(b - 1e-9) - 1.0
            there = min(there, (line - b0) / db)
        middle = 0.5 * (here + there)
        a, b, share = a0 + middle * da, b0 + middle * db, there - here
        if da == 0.0 and db == 0.0:
            share = 1.0
        i, j = int(np.floor(a)), int(np.floor(b))
        u, v = a - i, b - j
        mixed = (there - here) ** 2 * da * db / 12.0
        n = i * stride + j
        for corner in range(4):
            wide, high = corner >> 1, corner & 1
            along = u if wide else 1.0 - u
            across = v if high else 1.0 - v
            w = share * (along * across + (mixed if wide == high else -mixed))
            # On a grid line the nodes beside it, which may be air or padding, have rounding only.
            if abs(w) > 1e-12:
                nodes[count] = n + wide * stride + high
                weights[count] = w
                count += 1
        if there >= 1.0:
            return count
        here = there
