"""Which places of a table are the same, and their numbers."""

from __future__ import annotations

import numpy as np

from stillground.protocols import Array, Integers


def numbered(places: Array) -> tuple[Integers, Integers]:
    """Numbers equal places (to the millimetre) in the order of the table.

    Parameters
    ----------
    places : array, shape (n, n_axes), m

    Returns
    -------
    number : array of integers, shape (n,)
        Of each place, from 0.
    where : array of integers, shape (n_distinct,)
        Where each number stands first.

    Examples
    --------
    >>> number, where = numbered(np.array([[9.0], [4.0], [9.0], [7.0]]))
    >>> number.tolist(), where.tolist()
    ([0, 1, 0, 2], [0, 1, 3])
    """
    _, where, group = np.unique(places.round(3), axis=0, return_index=True, return_inverse=True)
    order = np.argsort(where)
    rank = np.empty_like(order)
    rank[order] = np.arange(order.size)
    return rank[group.reshape(-1)], where[order]
