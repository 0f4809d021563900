"""All rules on twins of the survey whose ground is known."""

from __future__ import annotations

from collections.abc import Generator

import numpy as np

from stillground.errors import ConfigError
from stillground.grid import Grid
from stillground.progress import staged
from stillground.protocols import Array, Measurement, Progress, Rehearsal
from stillground.reconstruct import Method, Problem, judge, prepare
from stillground.rehearsal.families import layered_grounds, prior_grounds
from stillground.rehearsal.ranking import rank
from stillground.solve import DataSpace, Run, back, iterate, n_probes

_LEAST_SIGNAL = 0.05


def rehearse(
    coarse: tuple[Grid, Measurement],
    fine: tuple[Grid, Measurement],
    method: Method,
    *,
    twins: int,
    seed: int,
    noise: float = 1.0,
    described: Array | None = None,
) -> Generator[Progress, None, Rehearsal]:
    """Draws grounds, takes their data on a finer grid with the survey's own errors, and lets every rule stop.

    Families are grounds from the prior, layered grounds and, where given, one described ground under
    many draws of the noise. Each is scaled so that its signal is as strong as the survey's.

    Parameters
    ----------
    coarse, fine : pair of Grid and Measurement
        Where twins are reconstructed, and where their data come from: nested, fine the finer.
    method : Method
    twins : int
        In each family, at least 2.
    seed : int
    noise : float
        Size of the errors over what is stated.
    described : array, shape (n_nodes of fine,), optional
        A ground less the background, in the property's unit; it is not scaled.

    Yields
    ------
    Progress

    Returns
    -------
    Rehearsal
    """
    if twins < 2:
        raise ConfigError(f"rehearsal.twins: {twins} tell nothing; take 30")
    grid, measurement = coarse
    fine_grid, fine_measurement = fine
    random = np.random.default_rng(seed)
    problem = prepare(
        measurement, grid, method, products=method.iterations * twins * (1 + n_probes(measurement.data.size))
    )
    n_data = measurement.data.size
    signal = max(float(problem.standard.b @ problem.standard.b) - noise**2 * n_data, _LEAST_SIGNAL * n_data)

    families = {
        "prior": prior_grounds(fine_grid, method.correlation, method.smoothness, twins, random),
        "layers": layered_grounds(fine_grid, method.correlation[-1], twins, random),
    }
    data = {}
    for name, grounds in families.items():
        seen = fine_measurement.operator.matmat(grounds) / measurement.errors[:, None]
        scale = np.sqrt(signal * twins / np.sum(seen**2))
        families[name], data[name] = scale * grounds, scale * seen
    if described is not None:
        families["described"] = np.tile(described[:, None], (1, twins))
        seen = fine_measurement.operator.matvec(described) / measurement.errors
        data["described"] = np.tile(seen[:, None], (1, twins))

    known = _Grounds(problem)
    ratios: dict[str, dict[str, Array]] = {}
    total_error = resolved = np.empty(0)
    for number, (name, grounds) in enumerate(families.items(), start=1):
        truths = _on_coarse(grounds, fine_grid, grid)
        noisy = data[name] + noise * random.standard_normal((n_data, twins))
        work = iterate(method.solver, problem.operator, noisy, method.iterations)
        runs = yield from staged(work, f"rehearsing {name} grounds ({number} of {len(families)})")
        stops = [_stops(run, method) for run in runs]
        ratios[name], fits = _ratios(runs, stops, truths, known, method.choose)
        if name == "prior":
            total_error, resolved = _maps(fits, truths, grid, method)
    cost, groups = rank(ratios)
    return Rehearsal(ratios, cost, groups, total_error, resolved)


def _on_coarse(grounds: Array, fine: Grid, coarse: Grid) -> Array:
    """Values at the coarse nodes, which are among the fine ones, shape (n_nodes, n)."""
    step = (fine.shape[0] - 1) // (coarse.shape[0] - 1)
    field = grounds.reshape(*fine.shape, -1)
    return np.ascontiguousarray(field[(slice(None, None, step),) * len(fine.shape)]).reshape(
        coarse.n_nodes, -1
    )


def _stops(run: Run, method: Method) -> dict[str, float]:
    """Where each rule stops, the last iterate where it finds none; rules that do not apply are left out."""
    picks, _ = judge(run.history, method)
    last = float(run.history.last)
    return {
        name: last if pick.iteration is None else pick.iteration
        for name, pick in picks.items()
        if not pick.reason.startswith("does not apply")
    }


class _Grounds:
    """Grounds of many solutions, and their distances from a truth.

    In a data space the unknowns are few: what each of them does to the ground is computed once, and
    distances then follow from inner products, without a transform for every iterate.
    """

    def __init__(self, problem: Problem) -> None:
        self._problem = problem
        self._weights = problem.grid.weights()
        self._basis = self._gram = None
        if isinstance(problem.operator, DataSpace):
            self._basis = self.grounds(np.eye(problem.operator.shape[1]))
            self._gram = self._basis.T @ (self._weights[:, None] * self._basis)

    def grounds(self, solutions: Array) -> Array:
        """Shape (n_nodes, n_solutions)."""
        return self._problem.anomaly(back(self._problem.operator, solutions))

    def distances(self, solutions: Array, truth: Array) -> Array:
        """L2 distances of the solutions' grounds from one truth, shape (n_solutions,)."""
        weighted = self._weights * truth
        if self._basis is None or self._gram is None:
            return np.asarray(np.sqrt(self._weights @ np.square(self.grounds(solutions) - truth[:, None])))
        squares = np.einsum("ij,ij->j", solutions, self._gram @ solutions)
        squares += weighted @ truth - 2 * ((self._basis.T @ weighted) @ solutions)
        return np.asarray(np.sqrt(np.maximum(squares, 0.0)))


def _ratios(
    runs: tuple[Run, ...], stops: list[dict[str, float]], truths: Array, known: _Grounds, choose: str
) -> tuple[dict[str, Array], Array]:
    """Error over the best by rule, and the fits at the chosen rule's stops, shape (n_nodes, n_twins)."""
    found: dict[str, list[float]] = {}
    chosen = []
    for j, run in enumerate(runs):
        stopped = {rule: run.inside(stop) for rule, stop in stops[j].items()}
        chosen.append(stopped.get(choose, run.inside(run.history.last)))
        solutions = np.column_stack([*run.solutions, *stopped.values()])
        errors = known.distances(solutions, truths[:, j])
        best = float(errors.min())
        for rule, error in zip(stopped, errors[len(run.solutions) :], strict=True):
            found.setdefault(rule, []).append(float(error) / best if best > 0 else 1.0)
    ratios = {rule: np.array(values) for rule, values in found.items() if len(values) == len(runs)}
    return ratios, known.grounds(np.column_stack(chosen))


def _maps(fits: Array, truths: Array, grid: Grid, method: Method) -> tuple[Array, Array]:
    def mean(values: Array) -> Array:
        return grid.local_mean(values.mean(axis=1), method.correlation)

    total = np.sqrt(mean(np.square(fits - truths)))
    resolved = mean(fits * truths) / np.maximum(mean(np.square(truths)), np.finfo(float).tiny)
    return total, resolved
