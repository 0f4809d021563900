"""Synthetic grounds through the survey: which rule to trust here, and what can come back at all."""

from stillground.rehearsal.pattern import through_patterns
from stillground.rehearsal.ranking import rank
from stillground.rehearsal.rehearse import rehearse

__all__ = ["rank", "rehearse", "through_patterns"]
