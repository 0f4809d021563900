"""The conformance kit for authors of solvers and stopping rules.

Call `check_solver` and `check_rule` in a test of your own; they raise AssertionError with the law that
was broken.
"""

from stillground.testing.rules import check_rule
from stillground.testing.solvers import check_solver

__all__ = ["check_rule", "check_solver"]
