"""Iterations in standard form and their history."""

from stillground.solve.run import Run, iterate

__all__ = ["Run", "iterate"]
