"""Runs an iteration to a given length, keeps its history, and gives back any iterate of it."""

from __future__ import annotations

import math
from collections.abc import Generator
from dataclasses import dataclass
from itertools import islice

import numpy as np
from pylops import LinearOperator

from stillground.protocols import Array, History, Progress, Solver
from stillground.solve.columns import norm

KEPT_BYTES = 512 * 2**20
"""Memory for kept iterates; those beyond it are made again when asked for."""

_PROBED_DATA = 1000


def n_probes(n_data: int) -> int:
    """Disturbed copies of the data that `iterate` adds: enough for n_data times them to reach 1000."""
    return math.ceil(_PROBED_DATA / n_data)


@dataclass(frozen=True)
class Run:
    """A finished iteration in standard form.

    ``solutions`` holds the iterates 0, 1, ... that fitted into the memory budget, read-only,
    shape (n_unknowns,) each; ``residuals`` all of them, shape (n_rows, n_data). ``columns`` are the
    data and their disturbed copies, shape (n_data, n_columns): only together do they give the same
    iterates again to the bit.
    """

    history: History
    residuals: Array
    solutions: tuple[Array, ...]
    operator: LinearOperator
    columns: Array
    solver: Solver

    def solution(self, iteration: float) -> Array:
        """The iterate at a fractional iteration, shape (n_unknowns,): linear between neighbours."""
        whole, part = self._split(iteration)
        wanted = [whole] if part == 0 else [whole, whole + 1]
        if wanted[-1] < len(self.solutions):
            found = [self.solutions[k] for k in wanted]
        else:
            again = islice(self.solver(self.operator, self.columns), wanted[0], wanted[-1] + 1)
            found = [iterate.solution[:, 0] for iterate in again]
        return found[0] if part == 0 else (1 - part) * found[0] + part * found[1]

    def residual(self, iteration: float) -> Array:
        """Whitened residual at a fractional iteration, shape (n_data,)."""
        whole, part = self._split(iteration)
        if part == 0:
            return np.asarray(self.residuals[whole])
        return np.asarray((1 - part) * self.residuals[whole] + part * self.residuals[whole + 1])

    def _split(self, iteration: float) -> tuple[int, float]:
        inside = min(max(iteration, 0.0), float(self.history.last))
        return int(inside), inside - int(inside)


def iterate(
    solver: Solver,
    operator: LinearOperator,
    b: Array,
    iterations: int,
    *,
    seed: int = 0,
    kept_bytes: int = KEPT_BYTES,
) -> Generator[Progress, None, Run]:
    """Runs ``solver`` for ``iterations`` steps, or fewer where it ends by itself.

    Beside the data the solver works on copies of them disturbed by z, vectors of random signs, the
    size of the noise itself; the degrees of freedom of iterate k are the mean of
    ``z . (fit_k(b + z) - fit_k(b))`` and never fall.

    Parameters
    ----------
    solver : Solver
    operator : pylops.LinearOperator, shape (n_data, n_unknowns)
    b : array, shape (n_data,)
    iterations : int
    seed : int
        Of the disturbances.
    kept_bytes : int
        Memory for kept iterates.

    Yields
    ------
    Progress

    Returns
    -------
    Run

    References
    ----------
    Girard (1989), A fast Monte-Carlo cross-validation procedure for large least squares problems with
    noisy data, Numer. Math. 56. The size of the disturbance: a small one would measure the kinks of the
    iteration, which is not linear in the data.
    """
    signs = np.random.default_rng(seed).choice([-1.0, 1.0], size=(b.size, n_probes(b.size)))
    columns = np.column_stack([b, b[:, None] + signs])
    n_kept = max(kept_bytes // (8 * operator.shape[1]), 1)

    solutions: list[Array] = []
    residuals: list[Array] = []
    gradients: list[float | None] = []
    sizes, steps, freedoms = [], [], []
    before = np.zeros(operator.shape[1])
    for step in islice(solver(operator, columns), iterations + 1):
        x, r = step.solution[:, 0], step.residual
        if step.index < n_kept:
            solutions.append(np.ascontiguousarray(x))
            solutions[-1].flags.writeable = False
        residuals.append(r[:, 0].copy())
        gradients.append(step.gradient_norm)
        sizes.append(float(norm(x[:, None])[0]))
        steps.append(float(norm((x - before)[:, None])[0]))
        moved = (columns[:, 1:] - r[:, 1:]) - (b - r[:, 0])[:, None]
        freedoms.append(float(np.mean(np.sum(signs * moved, axis=0))))
        before = x
        chi_square = float(residuals[-1] @ residuals[-1]) / b.size
        yield Progress("", step.index, iterations, f"misfit {chi_square:.3g}")

    kept = np.array(residuals)
    history = History(
        n_data=b.size,
        residual_norm=np.linalg.norm(kept, axis=1),
        residual_step=np.linalg.norm(np.diff(kept, axis=0, prepend=kept[:1]), axis=1),
        solution_norm=np.array(sizes),
        step_norm=np.array(steps),
        gradient_norm=None if None in gradients else np.array(gradients, dtype=float),
        degrees_of_freedom=np.maximum.accumulate(freedoms),
    )
    return Run(history, kept, tuple(solutions), operator, columns, solver)
