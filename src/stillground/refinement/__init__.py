"""Repeats a reconstruction on finer and finer grids and says whether the answer settles."""

from stillground.refinement.climb import Climb, climb
from stillground.refinement.expected import WITHOUT_WEIGHTS, expected_order, rough_limit
from stillground.refinement.grid_index import grid_index
from stillground.refinement.verdict import compare, judge

__all__ = [
    "WITHOUT_WEIGHTS",
    "Climb",
    "climb",
    "compare",
    "expected_order",
    "grid_index",
    "judge",
    "rough_limit",
]
