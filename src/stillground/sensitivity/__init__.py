"""Repeats a reconstruction with other lengths, another smoothness and other backgrounds."""

from stillground.sensitivity.vary import vary

__all__ = ["vary"]
