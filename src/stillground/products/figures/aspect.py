"""How tall the ground is drawn: as it is, or exaggerated where a long thin section would be a mere strip."""

from __future__ import annotations

import numpy as np

from stillground.protocols import Array

# A figure more than this wider than tall is exaggerated, by the least of these that makes it no wider.
WIDEST = 3.0
STEPS = (1, 2, 3, 4, 5, 8, 10, 20, 50, 100)


def exaggeration(nodes: tuple[Array, ...], widest: float = WIDEST) -> int:
    """Inches for a metre of elevation over inches for one of distance; 1 unless the section is long and thin.

    Parameters
    ----------
    nodes : tuple of array
        Distance and elevation, or elevation alone, m.
    widest : float
        How much wider than tall a picture may be.

    Examples
    --------
    >>> exaggeration((np.array([0.0, 18.0]), np.array([186.0, 212.0])))
    1
    >>> exaggeration((np.array([0.0, 60.0]), np.array([204.0, 212.0])))
    3
    """
    if len(nodes) == 1:
        return 1
    across, up = (float(np.ptp(axis)) for axis in nodes)
    return next((step for step in STEPS if across <= widest * up * step), STEPS[-1])


def proportions(nodes: tuple[Array, ...]) -> tuple[float, float]:
    """Width and height of a picture of the section, in the metres of its distance axis."""
    across, up = (float(axis[-1] - axis[0]) for axis in nodes)
    return across, up * exaggeration(nodes)


def elevation_label(nodes: tuple[Array, ...]) -> str:
    """The words at the elevation axis, in two lines where it is exaggerated: small maps are not tall."""
    times = exaggeration(nodes)
    return "elevation (m)" if times == 1 else f"elevation (m)\n{times} times exaggerated"
