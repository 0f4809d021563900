"""How a pair of coils at low induction number weighs the ground by depth, and exact weights of nodes.

Depths are below the coils and over the distance between them. The cumulative response R(z) is the share
of the reading over uniform ground that comes from below z; ground at z weighs ``-dR/dz``:

    vertical dipoles     R(z) = 1 / sqrt(4 z^2 + 1)
    horizontal dipoles   R(z) = sqrt(4 z^2 + 1) - 2 z

References
----------
McNeill (1980), Electromagnetic terrain conductivity measurement at low induction numbers.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
Booleans = NDArray[np.bool_]


def response(depth: Array, vertical: Booleans) -> Array:
    """R at depths from 0 up, for vertical dipoles where ``vertical``; shapes broadcast.

    Examples
    --------
    >>> response(np.array([0.0, 2.0]), np.array([True, False]))
    array([1.        , 0.12310563])
    """
    root = np.sqrt(4 * depth**2 + 1)
    # The difference of the root and 2 z, without the digits that these share.
    return np.where(vertical, 1 / root, 1 / (root + 2 * depth))


def depth_of(share: Array, vertical: Booleans) -> Array:
    """The depth at which R is ``share``, above 0 and at most 1."""
    return np.where(vertical, 0.5 * np.sqrt((1 - share) * (1 + share)) / share, 0.25 * (1 / share - share))


def integral(depth: Array, vertical: Booleans) -> Array:
    """Integral of R from 0 to ``depth``.

    Notes
    -----
    ``asinh(2 z) / 2`` for vertical dipoles, ``z R(z) / 2 + asinh(2 z) / 4`` for horizontal ones.
    """
    half = 0.5 * np.arcsinh(2 * depth)
    return np.where(vertical, half, 0.5 * (depth * response(depth, vertical) + half))


def node_weights(depth: Array, top: Array, vertical: Booleans, *, tail: bool) -> Array:
    """Weights of nodes for ground that is linear between them, integrated exactly.

    Parameters
    ----------
    depth : array, shape (n_data, n_nodes)
        Of the nodes for each datum, decreasing along the nodes; negative above the coils.
    top : array, shape (n_data,)
        Depth of the ground's surface, from 0 up. Above it nothing weighs: of the interval that holds it
        only the part below counts, so that the node above it weighs for that part alone.
    vertical : array of bool, shape (n_data,)
    tail : bool
        Whether the ground below the first node is taken to be as that node, or left out.

    Returns
    -------
    array, shape (n_data, n_nodes)
        Without a unit; with ``tail`` they add up to R(top).
    """
    vertical, top = vertical[:, None], top[:, None]
    clipped = np.maximum(depth, top)
    R, P = response(clipped, vertical), integral(clipped, vertical)
    width = depth[:, :-1] - depth[:, 1:]
    mean = (P[:, :-1] - P[:, 1:]) / width
    # Where in its interval each clipped end lies: 0 at the lower node, 1 at the upper one.
    low, high = ((depth[:, :-1] - end) / width for end in (clipped[:, :-1], clipped[:, 1:]))
    below, above = R[:, :-1], R[:, 1:]
    weights = np.zeros(depth.shape)
    weights[:, 1:] += above * high - below * low - mean
    weights[:, :-1] += above * (1 - high) - below * (1 - low) + mean
    if tail:
        weights[:, 0] += R[:, 0]
    return weights
