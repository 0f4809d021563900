"""Runs an iteration to a given length, keeps its history, and gives back any iterate of it."""

from __future__ import annotations

import math
from collections import defaultdict
from collections.abc import Callable, Generator, Iterable, Sequence
from dataclasses import dataclass
from itertools import islice

import numpy as np
from numpy.typing import ArrayLike
from pylops import LinearOperator

from stillground.protocols import Array, History, Integers, Iterate, Progress, RowBlocks, Solver
from stillground.solve.columns import frozen, inner, norm, ratio
from stillground.solve.data_space import DataSpace
from stillground.solve.whiteness import Periodogram

KEPT_BYTES = 512 * 2**20
"""Memory for kept iterates; those beyond it are made again when asked for."""

_PROBED_DATA = 1000
# Fewer iterations than this are not worth judging when the user breaks off.
_JUDGED = 3


def n_probes(n_data: int) -> int:
    """Disturbed copies of the data that `iterate` adds: enough for n_data times them to reach 1000."""
    return math.ceil(_PROBED_DATA / n_data)


@dataclass(frozen=True)
class Run:
    """A finished iteration in standard form.

    ``solutions`` holds the iterates 0, 1, ... that fitted into the memory budget, read-only,
    shape (n_unknowns,) each; ``residuals`` all of them, shape (n_rows, n_data). ``columns`` are all
    that was iterated with it, shape (n_data, n_columns), and ``column`` its own: only together do they
    give the same iterates again to the bit.
    """

    history: History
    residuals: Array
    solutions: tuple[Array, ...]
    operator: LinearOperator
    columns: Array
    column: int
    solver: Solver
    interrupted: bool = False

    def solution(self, iteration: float) -> Array:
        """The iterate at a fractional iteration, shape (n_unknowns,): linear between neighbours."""
        return back(self.operator, self.inside(iteration)[:, None])[:, 0]

    def inside(self, iteration: float) -> Array:
        """The same as the iteration knows it: in its data space, where it ran in one."""
        return inside((self,), [iteration])[:, 0]

    def residual(self, iteration: float) -> Array:
        """Whitened residual at a fractional iteration, shape (n_data,)."""
        whole, part = self._split(iteration)
        if part == 0:
            return np.asarray(self.residuals[whole])
        return np.asarray((1 - part) * self.residuals[whole] + part * self.residuals[whole + 1])

    def _split(self, iteration: float) -> tuple[int, float]:
        inside = min(max(iteration, 0.0), float(self.history.last))
        return int(inside), inside - int(inside)


def inside(runs: Sequence[Run], iterations: ArrayLike) -> Array:
    """Fractional iterates, one of each run of one `iterate`, shape (n_unknowns, n_runs).

    As the iteration knows them, see `Run.inside`. Those that were not kept are made again, all at once.
    """
    first = runs[0]
    stops = np.clip(np.asarray(iterations, dtype=float), 0.0, first.history.last)
    rows = np.arange(int(np.ceil(stops.max())) + 1)
    shares = np.maximum(1.0 - np.abs(stops - rows[:, None]), 0.0)
    wanted = np.flatnonzero(shares.any(axis=1)).tolist()
    found: Iterable[Array]
    if rows.size <= len(first.solutions):
        found = (np.column_stack([run.solutions[k] for run in runs]) for k in wanted)
    else:
        own = [run.column for run in runs]
        again = islice(first.solver(first.operator, first.columns), rows.size)
        found = (iterate.solution[:, own] for iterate in again if iterate.index in wanted)
    mixed = np.zeros((first.operator.shape[1], len(runs)))
    for k, solutions in zip(wanted, found, strict=True):
        mixed += shares[k] * solutions
    return mixed


def back(operator: LinearOperator, solutions: Array) -> Array:
    """Solutions in standard form, shape (n_unknowns, n_columns), of an operator or its `DataSpace`."""
    return operator.back(solutions) if isinstance(operator, DataSpace) else solutions


def iterate(
    solver: Solver,
    operator: LinearOperator,
    b: Array,
    iterations: int,
    *,
    probes: int | None = None,
    seed: int = 0,
    kept_bytes: int = KEPT_BYTES,
    breakable: bool = False,
    watch: Callable[[Array], None] | None = None,
) -> Generator[Progress, None, tuple[Run, ...]]:
    """Runs ``solver`` for ``iterations`` steps, or fewer where it ends by itself.

    Beside the data the solver works on copies of them disturbed by z, vectors of random signs, the
    size of the noise itself; the degrees of freedom of iterate k are the mean of
    ``z . (fit_k(b + z) - fit_k(b))`` and never fall.

    Parameters
    ----------
    solver : Solver
    operator : pylops.LinearOperator, shape (n_data, n_unknowns)
        Where it offers `RowBlocks`, whiteness is told along its groupings.
    b : array, shape (n_data, n_problems)
        Independent problems that share the products.
    iterations : int
    probes : int, optional
        Disturbed copies of each problem; default `n_probes`, 0 for no degrees of freedom.
    seed : int
        Of the disturbances, the same for all problems.
    kept_bytes : int
        Memory for kept iterates.
    breakable : bool
        Whether a keyboard interrupt ends the iteration early, for what is done to be judged.
    watch : callable, optional
        Is given every iterate of all problems, shape (n_unknowns, n_problems), whether it is kept or not.

    Yields
    ------
    Progress

    Returns
    -------
    tuple of Run
        One for each problem.

    Notes
    -----
    An early end by a keyboard interrupt is told by ``Run.interrupted``; with fewer than three iterations
    done it passes on.

    References
    ----------
    Girard (1989), A fast Monte-Carlo cross-validation procedure for large least squares problems with
    noisy data, Numer. Math. 56. The size of the disturbance: a small one would measure the kinks of the
    iteration, which is not linear in the data.
    """
    n_data, problems = b.shape
    signs = np.random.default_rng(seed).choice(
        [-1.0, 1.0], size=(n_data, 1, n_probes(n_data) if probes is None else probes)
    )
    # Column 0 of each problem are its data, the others their disturbed copies.
    columns = (b[:, :, None] + np.concatenate([np.zeros((n_data, 1, 1)), signs], axis=2)).reshape(n_data, -1)
    own = np.arange(problems) * (1 + signs.shape[2])
    n_kept = max(kept_bytes // (8 * operator.shape[1] * problems), 1)
    white = Periodogram(operator.groupings if isinstance(operator, RowBlocks) else {})

    solutions: list[Array] = []
    table: dict[str, list[Array]] = defaultdict(list)
    before: Iterate | None = None
    interrupted = False
    try:
        for step in islice(solver(operator, columns), iterations + 1):
            r = step.residual[:, own]
            row = _row(step, before, own) | {f"whiteness {name}": d for name, d in white(r).items()}
            if signs.size:
                spread = step.residual.reshape(n_data, problems, -1)
                moved = signs - (spread[:, :, 1:] - spread[:, :, :1])
                freedom = np.mean(np.sum(signs * moved, axis=0), axis=-1)
                known = table["degrees_of_freedom"][-1:] or [freedom]
                row["degrees_of_freedom"] = np.maximum(freedom, known[0])
            x = step.solution[:, own]
            if step.index < n_kept:
                solutions.append(frozen(x))
            if watch is not None:
                watch(x)
            for name, values in row.items():
                table[name].append(values)
            table["residual"].append(r)
            before = step
            yield Progress("", step.index, iterations, f"misfit {float(np.mean(r * r)):.3g}")
    except KeyboardInterrupt:
        interrupted = True
        if not breakable or len(table["residual"]) <= _JUDGED:
            raise

    residuals = table.pop("residual")
    # An interruption may have come between two columns of the last row.
    table = {name: rows[: len(residuals)] for name, rows in table.items()}
    solutions = solutions[: len(residuals)]
    kept = np.stack(residuals)
    norms = np.linalg.norm(kept, axis=1)
    residual_steps = np.linalg.norm(np.diff(kept, axis=0, prepend=kept[:1]), axis=1)
    stacked = {name: np.stack(rows) for name, rows in table.items() if len(rows) == len(kept)}
    return tuple(
        Run(
            history=History(
                n_data=n_data,
                ended=len(kept) <= iterations and not interrupted,
                residual_norm=norms[:, j],
                residual_step=residual_steps[:, j],
                whiteness={
                    name.removeprefix("whiteness "): values[:, j]
                    for name, values in stacked.items()
                    if name.startswith("whiteness ")
                },
                **{
                    name: values[:, j]
                    for name, values in stacked.items()
                    if not name.startswith("whiteness ")
                },
            ),
            residuals=kept[:, :, j],
            solutions=tuple(x[:, j] for x in solutions),
            operator=operator,
            columns=columns,
            column=int(own[j]),
            solver=solver,
            interrupted=interrupted,
        )
        for j in range(problems)
    )


def _row(step: Iterate, before: Iterate | None, own: Integers) -> dict[str, Array]:
    """One row of the history, shape (n_problems,) each; what the method does not have is left out."""
    x = step.solution[:, own]
    row = {
        "solution_norm": norm(x),
        "step_norm": norm(x - before.solution[:, own]) if before else np.zeros(own.size),
    }
    if step.gradient_norm is not None:
        row["gradient_norm"] = step.gradient_norm[own]
    if step.filter_slope is not None:
        row["filter_slope"] = step.filter_slope[own]
    if step.dual is not None:
        row["error_bound"] = np.full(own.size, np.inf)
        if before is not None and before.dual is not None:
            z = step.dual[:, own] - before.dual[:, own]
            mean = 0.5 * (step.residual[:, own] + before.residual[:, own])
            row["error_bound"] = ratio(inner(mean, z), norm(z))
    return row
