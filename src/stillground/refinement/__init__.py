"""Repeats a reconstruction on finer and finer grids and says whether the answer settles."""

from stillground.refinement.climb import Climb, climb
from stillground.refinement.verdict import judge

__all__ = ["Climb", "climb", "judge"]
