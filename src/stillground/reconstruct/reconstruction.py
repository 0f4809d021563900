"""One reconstruction on one grid, and the numbers and functions it is made by."""

from __future__ import annotations

from collections.abc import Generator, Mapping
from dataclasses import dataclass, field, replace

import numpy as np
from pylops import LinearOperator

from stillground.grid import Grid
from stillground.operators.prior_root import PriorRoot
from stillground.protocols import Array, History, Measurement, Pick, Progress, Rule, RuleOptions, Solver
from stillground.reconstruct.extras import ground_deviation
from stillground.reconstruct.suspicion import noise_size, questioned
from stillground.solve import DataSpace, Run, iterate, n_probes
from stillground.solve.data_space import MOST_DATA
from stillground.standard_form import StandardForm, fit_background, standard_form
from stillground.stopping.gcv import gcv


@dataclass(frozen=True)
class Method:
    """How to reconstruct, whatever the grid.

    Parameters
    ----------
    correlation : tuple of float
        Correlation lengths along the grid's axes, m.
    smoothness : float
        Exponent s of the prior covariance.
    solver : Solver
    iterations : int
    rules : mapping of str to Rule
    choose : str
        The rule whose pick is the answer; one of ``rules``.
    options : RuleOptions
    background : float or None
        Constant prior mean in the unit of the ground property; None fits it to the data. That of a
        measurement with a ``background`` of its own goes before it.
    bounds : pair of float or None
        Least and greatest value of the ground property; only some solvers keep them.
    trust : bool
        Whether the stated errors have the right size; otherwise generalised cross-validation tells it to
        the rules that need it.
    """

    correlation: tuple[float, ...]
    smoothness: float
    solver: Solver
    iterations: int
    rules: Mapping[str, Rule]
    choose: str
    options: RuleOptions = field(default_factory=RuleOptions)
    background: float | None = None
    bounds: tuple[float, float] | None = None
    trust: bool = True


@dataclass(frozen=True)
class Reconstruction:
    """The whole iteration on one grid with every rule's pick.

    ``noise`` is the estimated size of the errors over what is stated.
    """

    grid: Grid
    measurement: Measurement
    method: Method
    standard: StandardForm
    run: Run
    picks: Mapping[str, Pick]
    noise: float

    def model(self, iteration: float) -> Array:
        """Nodal field of the ground property at a fractional iteration, shape ``grid.shape``."""
        return self.standard.ground(self.run.solution(iteration)).reshape(self.grid.shape)

    @property
    def options(self) -> RuleOptions:
        """As the rules took them."""
        return _options(self.method, self.noise)

    def stop(self, rule: str) -> float:
        """Where the picture of a rule is taken: its pick, or the last iterate where it found none."""
        pick = self.picks[rule].iteration
        return float(self.run.history.last) if pick is None else pick


@dataclass(frozen=True)
class Problem:
    """A measurement in standard form with the operator to iterate on: its own, or its data space."""

    grid: Grid
    standard: StandardForm
    operator: LinearOperator

    def anomaly(self, solutions: Array) -> Array:
        """Grounds less the background, shape (n_nodes, n_columns), of solutions in standard form."""
        return np.asarray(self.standard.prior_root.matmat(solutions[: self.grid.n_nodes]))


def takes_data_space(n_data: int, products: int, bounds: tuple[float, float] | None) -> bool:
    """Whether making the data space, n_data products each way, costs less than ``products`` on the grid."""
    return bounds is None and n_data <= min(products, MOST_DATA)


def prior(measurement: Measurement, grid: Grid, method: Method) -> tuple[PriorRoot, Array]:
    """The root of the prior covariance, scaled for a measurement, and the prior mean, (n_nodes,)."""
    background = measurement.background
    if background is None:
        constant = fit_background(measurement) if method.background is None else method.background
        background = np.full(grid.n_nodes, constant)
    # Relative to the background, solutions have no unit. Iterates do not depend on the scale, but for how
    # much the ground may do before extra unknowns do.
    deviation = abs(float(background[0])) or 1.0
    if measurement.extras:
        root = PriorRoot(grid, method.correlation, method.smoothness)
        deviation = ground_deviation(measurement, root, background) or deviation
    return PriorRoot(grid, method.correlation, method.smoothness, deviation), background


def prepare(measurement: Measurement, grid: Grid, method: Method, *, products: int) -> Problem:
    """Brings a measurement to standard form.

    ``products`` is the number of iterations times that of columns.
    """
    root, background = prior(measurement, grid, method)
    standard = standard_form(measurement, root, background, method.bounds)
    if takes_data_space(measurement.data.size, products, method.bounds):
        return Problem(grid, standard, DataSpace(standard.operator))
    return Problem(grid, standard, standard.operator)


def reconstruct(
    measurement: Measurement, grid: Grid, method: Method, *, breakable: bool = False
) -> Generator[Progress, None, Reconstruction]:
    """Runs the iteration on one grid to its full length and lets every rule judge its history.

    With ``breakable`` a keyboard interrupt ends it early, and what is done is judged.

    Yields
    ------
    Progress

    Returns
    -------
    Reconstruction
    """
    columns = 1 + n_probes(measurement.data.size)
    problem = prepare(measurement, grid, method, products=method.iterations * columns)
    b = problem.standard.b[:, None]
    (run,) = yield from iterate(method.solver, problem.operator, b, method.iterations, breakable=breakable)
    picks, noise = judge(run.history, method)
    return Reconstruction(grid, measurement, method, problem.standard, run, picks, noise)


def judge(history: History, method: Method) -> tuple[dict[str, Pick], float]:
    """Every rule's pick on a history, and the size of the errors that cross-validation estimates.

    A pick whose misfit is far from that size is not firm, whatever its rule saw.
    """
    pick = gcv(history, method.options).iteration
    noise = noise_size(history, float(history.last) if pick is None else pick)
    options = _options(method, noise)
    picks = {name: questioned(rule(history, options), history, noise) for name, rule in method.rules.items()}
    return picks, noise


def _options(method: Method, noise: float) -> RuleOptions:
    return method.options if method.trust else replace(method.options, noise=noise)
