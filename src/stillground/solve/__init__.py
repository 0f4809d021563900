"""Iterations in standard form and their history."""

from stillground.solve.data_space import DataSpace
from stillground.solve.run import Run, back, iterate, n_probes

__all__ = ["DataSpace", "Run", "back", "iterate", "n_probes"]
