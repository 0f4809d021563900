"""Synthetic grounds through the survey: which rule to trust here, and what can come back at all."""

from stillground.rehearsal.pattern import through_patterns
from stillground.rehearsal.ranking import rank
from stillground.rehearsal.rehearse import FAMILIES, rehearse

__all__ = ["FAMILIES", "rank", "rehearse", "through_patterns"]
