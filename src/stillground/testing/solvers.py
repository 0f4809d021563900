"""The laws of a solver."""

from __future__ import annotations

from itertools import islice, pairwise

import numpy as np

from stillground.protocols import Iterate, Solver
from stillground.testing.problem import small_problem

_STEPS = 8


def check_solver(solver: Solver, *, tolerance: float = 1e-8) -> None:
    """Proves a solver against its contract on a small problem.

    Iterate 0 is the prior mean; iterates are numbered one by one, read-only and copies; the residual is
    that of the solution; several columns give what each gives alone; the same call gives the same bits;
    the residual shrinks over some iterations.

    Raises
    ------
    AssertionError
        With the law that was broken.
    """
    operator, b = small_problem()
    columns = np.column_stack([b, b[::-1]])
    steps = _run(solver, columns)
    assert steps, "a solver yields iterates"
    assert not steps[0].solution.any(), "iterate 0 is the prior mean, a solution of zeros"
    assert [step.index for step in steps] == list(range(len(steps))), "iterates are numbered one by one"
    for step in steps:
        for name in ("solution", "residual"):
            assert not getattr(step, name).flags.writeable, f"{name} is read-only"
        made = columns - operator.matmat(step.solution)
        assert np.abs(made - step.residual).max() < tolerance * np.abs(b).max(), "residual = b - A x"
        if step.dual is not None:
            back = operator.rmatmat(step.dual)
            assert np.abs(back - step.solution).max() < tolerance, "solution = A^T dual"
    assert not any(np.shares_memory(before.solution, after.solution) for before, after in pairwise(steps)), (
        "iterates are copies"
    )
    again = _run(solver, columns)
    assert all(
        np.array_equal(one.solution, other.solution) for one, other in zip(steps, again, strict=True)
    ), "the same call gives the same bits"
    alone = _run(solver, columns[:, :1])
    for one, other in zip(steps, alone, strict=False):
        gap = np.abs(one.solution[:, :1] - other.solution).max()
        assert gap < tolerance, "several columns give what each gives alone"
    sizes = [float(np.linalg.norm(step.residual[:, 0])) for step in steps]
    assert sizes[-1] < sizes[0], "the residual shrinks over some iterations"


def _run(solver: Solver, columns: np.ndarray) -> list[Iterate]:
    operator, _ = small_problem()
    return list(islice(solver(operator, columns), _STEPS + 1))
