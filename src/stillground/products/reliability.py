"""Which ground can be relied on: crossed well enough, coming back at all, the same on the rung before."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from stillground.products.units import with_unit
from stillground.protocols import Result

RELIABLE, MESH_DEPENDENT, POORLY_COVERED, NO_DATA = 0, 1, 2, 127
MEANINGS = ("reliable", "mesh_dependent", "poorly_covered")
SHARE_OF_MEDIAN = 0.05

# Some thirty twins tell the resolved fraction to 0.09: less than this is not told from nothing.
LEAST_RESOLVED = 0.1


def reliability(result: Result, tolerance: float, inside: NDArray[np.bool_]) -> NDArray[np.int8]:
    """Flags of all nodes, as a nodal field.

    Parameters
    ----------
    result : Result
        With a single rung ``mesh_change`` is NaN, and no node is called mesh-dependent.
    tolerance : float
        Largest change since the rung before, relative to the anomaly.
    inside : array of bool, nodal field
        Which nodes lie in the ground.

    Returns
    -------
    array of int8, nodal field
        `POORLY_COVERED` where the coverage is under 5 % of the median of its positive values in the
        ground, or where a rehearsal found that less than a tenth of the truth comes back; else
        `MESH_DEPENDENT` where ``mesh_change`` exceeds the tolerance; else `RELIABLE`; `NO_DATA`
        outside the ground.
    """
    coverage = result.coverage.values
    positive = coverage[inside & (coverage > 0)]
    least = SHARE_OF_MEDIAN * np.median(positive) if positive.size else np.inf
    flags = np.full(coverage.shape, RELIABLE, dtype=np.int8)
    flags[result.mesh_change > tolerance * result.anomaly] = MESH_DEPENDENT
    flags[~(coverage >= least)] = POORLY_COVERED
    if result.rehearsal is not None:
        flags[~(result.rehearsal.resolved >= LEAST_RESOLVED)] = POORLY_COVERED
    flags[~inside] = NO_DATA
    return flags


def reliability_comment(result: Result, tolerance: float) -> str:
    """By which limits the flags were given."""
    limits = f"{result.coverage.name} under {SHARE_OF_MEDIAN:.0%} of the median of its positive values"
    if result.rehearsal is not None:
        limits += f", or resolved_fraction under {LEAST_RESOLVED:g}"
    unjudged = "" if result.rehearsal is not None else " What comes back was not rehearsed."
    anomaly = with_unit(f"{result.anomaly:.6g}", result.property.units)
    return (
        f"mesh_dependent: mesh_change above {tolerance:g} of the rms anomaly, "
        f"{anomaly}; not judged where there is one rung only. "
        f"poorly_covered: {limits}.{unjudged}"
    )
