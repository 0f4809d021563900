"""The inner products of an operator's rows."""

from __future__ import annotations

import numpy as np
from pylops import LinearOperator

from stillground.protocols import Array

BATCH = 16
"""Rows made at a time: more of them would share no more work, and take memory."""


def gram(operator: LinearOperator) -> Array:
    """``A A^T``, symmetric to the bit, shape (n_data, n_data)."""
    n_data = operator.shape[0]
    found = np.empty((n_data, n_data))
    for start in range(0, n_data, BATCH):
        stop = min(start + BATCH, n_data)
        some = np.zeros((n_data, stop - start))
        some[np.arange(start, stop), np.arange(stop - start)] = 1.0
        found[:, start:stop] = operator.matmat(operator.rmatmat(some))
    return 0.5 * (found + found.T)
