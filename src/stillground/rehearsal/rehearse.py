"""All rules on twins of the survey whose ground is known."""

from __future__ import annotations

from collections.abc import Callable, Generator, Mapping

import numpy as np

from stillground.errors import ConfigError
from stillground.grid import Grid, carry
from stillground.progress import staged
from stillground.protocols import Array, Measurement, Pick, Progress, Rehearsal
from stillground.reconstruct import Method, Problem, judge, prepare
from stillground.rehearsal.families import layered_grounds, prior_grounds
from stillground.rehearsal.ranking import rank
from stillground.solve import DataSpace, Run, back, inside, iterate, n_probes
from stillground.solve.columns import inner

_LEAST_SIGNAL = 0.05

FAMILIES = ("prior", "layers")
"""Of synthetic grounds in every rehearsal, beside a described one."""


def no_averages(grid: Grid) -> Mapping[str, Array]:
    """What most kinds of measurement say of means that practice asks for."""
    return {}


def rehearse(
    coarse: tuple[Grid, Measurement],
    fine: tuple[Grid, Measurement],
    method: Method,
    *,
    twins: int,
    seed: int,
    noise: float = 1.0,
    described: tuple[Array, Array] | None = None,
    averages: Callable[[Grid], Mapping[str, Array]] = no_averages,
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
    described : pair of array, shape (n_nodes of fine,) and (n_data,), optional
        A ground less the background, in the unknown's unit, and its data less those of the background; they
        are not scaled.
    averages : callable
        From a grid to weights of its nodes by name: means whose errors are wanted.

    Yields
    ------
    Progress

    Returns
    -------
    Rehearsal

    Raises
    ------
    ConfigError
        With fewer than two twins, or when no rule applies to all of them.
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

    drawn = (
        prior_grounds(fine_grid, method.correlation, method.smoothness, twins, random),
        layered_grounds(fine_grid, method.correlation[-1], twins, random),
    )
    families = dict(zip(FAMILIES, drawn, strict=True))
    data = {}
    for name, grounds in families.items():
        seen = fine_measurement.operator.matmat(grounds) / measurement.errors[:, None]
        scale = np.sqrt(signal * twins / np.sum(seen**2))
        families[name], data[name] = scale * grounds, scale * seen
    if described is not None:
        ground, seen = described
        families["described"] = np.tile(ground[:, None], (1, twins))
        data["described"] = np.tile((seen / measurement.errors)[:, None], (1, twins))

    inner_product = _GroundProduct(problem)
    ratios: dict[str, dict[str, Array]] = {}
    left_out: dict[str, str] = {}
    total_error = resolved = np.empty(0)
    average_errors: dict[str, float] = {}
    for number, (name, grounds) in enumerate(families.items(), start=1):
        truths = carry(grounds.reshape(*fine_grid.shape, -1), fine_grid, grid).reshape(grid.n_nodes, -1)
        noisy = data[name] + noise * random.standard_normal((n_data, twins))
        errors = _Errors(inner_product, truths)
        work = iterate(method.solver, problem.operator, noisy, method.iterations, watch=errors.note)
        runs = yield from staged(work, f"rehearsing {name} grounds ({number} of {len(families)})")
        picks = [judge(run.history, method)[0] for run in runs]
        for rule in method.rules:
            reasons = [each[rule].reason for each in picks if not each[rule].applies]
            if reasons:
                left_out.setdefault(rule, f"{reasons[0]} ({len(reasons)} of {twins} {name} grounds)")
        applied = [rule for rule in method.rules if all(each[rule].applies for each in picks)]
        stops = {rule: np.array([_stop(run, p[rule]) for run, p in zip(runs, picks, strict=True)])
                 for rule in method.rules}  # fmt: skip
        ratios[name] = _ratios({rule: errors.at(stops[rule]) for rule in applied}, errors.best())
        if name == "prior":
            chosen = back(problem.operator, inside(runs, stops[method.choose]))
            fits = problem.anomaly(chosen)
            total_error, resolved = _maps(fits, truths, grid, method)
            wanted = averages(fine_grid)
            for mean, weights in averages(grid).items():
                missed = weights @ fits - wanted[mean] @ grounds
                average_errors[mean] = float(np.sqrt(np.mean(np.square(missed))))
    cost, groups = rank(ratios)
    if not cost:
        raise ConfigError(f"stopping.rules: none applies to all twins: {'; '.join(left_out.values())}")
    return Rehearsal(ratios, cost, groups, left_out, total_error, resolved, average_errors)


def _stop(run: Run, pick: Pick) -> float:
    """Where a rule stops, the last iterate where it finds nothing."""
    return float(run.history.last) if pick.iteration is None else pick.iteration


class _GroundProduct:
    """The L2 inner product of grounds, on solutions: ``<ground(x), ground(y)> = x . (M y)``.

    In a data space the unknowns are few: M is computed once, and no iterate needs a transform.
    """

    def __init__(self, problem: Problem) -> None:
        self._problem = problem
        self._weights = problem.grid.weights()[:, None]
        self._basis = self._matrix = None
        if isinstance(problem.operator, DataSpace):
            self._basis = problem.anomaly(back(problem.operator, np.eye(problem.operator.shape[1])))
            self._matrix = self._basis.T @ (self._weights * self._basis)

    def __call__(self, solutions: Array) -> Array:
        """``M x``, shape (n_unknowns, n_solutions)."""
        if self._matrix is not None:
            return np.asarray(self._matrix @ solutions)
        return self.of(self._problem.anomaly(solutions))

    def of(self, grounds: Array) -> Array:
        """What the product with grounds is on solutions, shape (n_unknowns, n_grounds)."""
        weighted = self._weights * grounds
        if self._basis is not None:
            return np.asarray(self._basis.T @ weighted)
        root = self._problem.standard.prior_root
        extras = np.zeros((self._problem.operator.shape[1] - root.shape[1], grounds.shape[1]))
        return np.vstack([root.rmatmat(weighted), extras])

    def square(self, grounds: Array) -> Array:
        """Squared norms of grounds, shape (n_grounds,)."""
        return np.asarray(np.sum(self._weights * grounds**2, axis=0))


class _Errors:
    """L2 errors of all iterates of the twins, noted as they pass: none of them needs to be kept."""

    def __init__(self, product: _GroundProduct, truths: Array) -> None:
        self._product = product
        self._truths, self._size = product.of(truths), product.square(truths)
        self._before: tuple[Array, Array] | None = None
        self._squares: list[Array] = []
        self._steps: list[Array] = []

    def note(self, solutions: Array) -> None:
        """Notes the next iterate of all twins, shape (n_unknowns, n_twins)."""
        image = self._product(solutions)
        x, seen = self._before or (solutions, image)
        self._squares.append(self._size + inner(solutions, image - 2 * self._truths))
        self._steps.append(inner(solutions - x, image - seen))
        self._before = solutions, image

    def at(self, stops: Array) -> Array:
        """Errors at a fractional iteration of each twin, shape (n_twins,)."""
        k = np.minimum(stops.astype(int), max(len(self._squares) - 2, 0))
        after = np.minimum(k + 1, len(self._squares) - 1)
        t, twin = stops - k, np.arange(stops.size)
        squares, steps = np.array(self._squares), np.array(self._steps)
        # |(1 - t) e + t e'|^2 from the errors e and e' and the step between them.
        between = (1 - t) * squares[k, twin] + t * squares[after, twin] - t * (1 - t) * steps[after, twin]
        return np.asarray(np.sqrt(np.maximum(between, 0.0)))

    def best(self) -> Array:
        """Errors of the best iterates, shape (n_twins,)."""
        return np.asarray(np.sqrt(np.maximum(np.min(self._squares, axis=0), 0.0)))


def _ratios(errors: dict[str, Array], best: Array) -> dict[str, Array]:
    """Errors at the stops of rules over the best; a stop between iterates may be better than all of them."""
    least = np.minimum.reduce([best, *errors.values()])
    return {
        rule: np.divide(error, least, out=np.ones_like(error), where=least > 0)
        for rule, error in errors.items()
    }


def _maps(fits: Array, truths: Array, grid: Grid, method: Method) -> tuple[Array, Array]:
    def mean(values: Array) -> Array:
        return grid.local_mean(values.mean(axis=1), method.correlation)

    total = np.sqrt(mean(np.square(fits - truths)))
    resolved = mean(fits * truths) / np.maximum(mean(np.square(truths)), np.finfo(float).tiny)
    return total, resolved
