"""Repeats a reconstruction with other lengths, another smoothness and other backgrounds."""

from stillground.sensitivity.vary import RECONSTRUCTIONS, vary

__all__ = ["RECONSTRUCTIONS", "vary"]
