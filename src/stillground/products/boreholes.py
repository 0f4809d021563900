"""Which positions stand below one another, as in a borehole."""

from __future__ import annotations

import numpy as np
from scipy.sparse import coo_array
from scipy.sparse.csgraph import connected_components
from scipy.spatial import KDTree

from stillground.protocols import Array, Integers

# From a position to the next below: steeper than this, horizontal over vertical, is down a hole (some 17
# degrees off plumb), flatter is along a slope (common practice, no source).
_STEEP = 0.3
_NEIGHBOURS = 16


def boreholes(places: Array) -> tuple[Integers, ...]:
    """Indices of the places in each borehole, from the top down.

    Parameters
    ----------
    places : array, shape (n, 3)
        East, north and elevation, m.

    Returns
    -------
    tuple of integer arrays
        Of two places or more each. A place goes to the nearest one below it where that is steeply below.

    Examples
    --------
    >>> places = np.array([[0, 0, -1], [0, 0, -3], [9, 0, -2], [0, 0, -2], [9, 0, -1.0]])
    >>> [hole.tolist() for hole in boreholes(places)]
    [[0, 3, 1], [4, 2]]
    """
    near = min(_NEIGHBOURS, len(places))
    _, others = KDTree(places).query(places, k=near)
    others = others.reshape(len(places), near)
    step = places[others] - places[:, np.newaxis]
    lower = step[..., 2] < -1e-6
    start = np.flatnonzero(lower.any(axis=1))
    # Neighbours come by their distance: the first that is lower is the nearest of them.
    first = np.argmax(lower[start], axis=1)
    below, down = others[start, first], step[start, first]
    steep = np.hypot(down[:, 0], down[:, 1]) <= _STEEP * -down[:, 2]
    start, below = start[steep], below[steep]
    links = coo_array((np.ones(start.size), (start, below)), shape=(len(places), len(places)))
    n, group = connected_components(links, directed=False)
    order = np.argsort(-places[:, 2], kind="stable")
    holes = (order[group[order] == i] for i in range(n))
    return tuple(hole for hole in holes if hole.size > 1)
