"""Places beside the trace of a profile, which may be bent."""

from __future__ import annotations

import numpy as np
from scipy.spatial import KDTree

from stillground.protocols import Array, Integers


def feet(trace: Array, points: Array, within: float) -> tuple[Integers, Array, Array]:
    """The nearest place on a trace for every point that lies beside it.

    Parameters
    ----------
    trace : array, shape (n_nodes, 2)
        Distinct nodes in plan, about evenly spaced. A single node is a place without ends.
    points : array, shape (n_points, 2)
    within : float
        Points farther off are left out, and so are those before the first node and beyond the last.

    Returns
    -------
    index : array of integers, shape (n_near,)
        Of the points beside the trace.
    place : array, shape (n_near,)
        Their nearest place on the trace, in nodes.
    aside : array, shape (n_near,)
        How far off it they lie.

    Examples
    --------
    >>> trace = np.array([[0.0, 0.0], [2.0, 0.0], [2.0, 2.0]])
    >>> index, place, aside = feet(trace, np.array([[1.0, 0.5], [3.0, 1.5], [-1.0, 0.0]]), 1.5)
    >>> index.tolist(), place.tolist(), aside.tolist()
    ([0, 1], [0.5, 1.75], [0.5, 1.0])
    """
    if len(trace) == 1:
        aside = np.linalg.norm(points - trace, axis=1)
        index = np.flatnonzero(aside <= within)
        return index, np.zeros(index.size), aside[index]
    steps = np.diff(trace, axis=0)
    lengths = np.linalg.norm(steps, axis=1)
    _, nearest = KDTree(trace).query(points, distance_upper_bound=within + lengths.max())
    index = np.flatnonzero(nearest < len(trace))
    points, nearest = points[index], nearest[index]
    place, aside = np.zeros(index.size), np.full(index.size, np.inf)
    for before in (1, 0):
        segment = np.clip(nearest - before, 0, len(steps) - 1)
        share = np.sum((points - trace[segment]) * steps[segment], axis=1) / lengths[segment] ** 2
        beyond = ((share < -1e-9) & (segment == 0)) | ((share > 1 + 1e-9) & (segment == len(steps) - 1))
        share = np.clip(share, 0, 1)
        off = np.linalg.norm(points - trace[segment] - share[:, np.newaxis] * steps[segment], axis=1)
        better = ~beyond & (off < aside)
        place[better], aside[better] = (segment + share)[better], off[better]
    near = aside <= within
    return index[near], place[near], aside[near]
