"""Iterations in standard form and their history."""

from stillground.solve.data_space import DataSpace
from stillground.solve.run import Run, back, inside, iterate, n_probes

__all__ = ["DataSpace", "Run", "back", "inside", "iterate", "n_probes"]
