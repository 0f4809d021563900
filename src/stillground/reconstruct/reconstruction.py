"""One reconstruction on one grid, and the numbers and functions it is made by."""

from __future__ import annotations

from collections.abc import Generator, Mapping
from dataclasses import dataclass, field

import numpy as np

from stillground.grid import Grid
from stillground.operators.prior_root import PriorRoot
from stillground.protocols import Array, Measurement, Pick, Progress, Rule, RuleOptions, Solver
from stillground.solve import Run, iterate
from stillground.standard_form import StandardForm, fit_background, standard_form


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
        Constant prior mean in the unit of the ground property; None fits it to the data.
    """

    correlation: tuple[float, ...]
    smoothness: float
    solver: Solver
    iterations: int
    rules: Mapping[str, Rule]
    choose: str
    options: RuleOptions = field(default_factory=RuleOptions)
    background: float | None = None


@dataclass(frozen=True)
class Reconstruction:
    """The whole iteration on one grid with every rule's pick."""

    grid: Grid
    measurement: Measurement
    standard: StandardForm
    run: Run
    picks: Mapping[str, Pick]

    def model(self, iteration: float) -> Array:
        """Nodal field of the ground property at a fractional iteration, shape ``grid.shape``."""
        return self.standard.ground(self.run.solution(iteration)).reshape(self.grid.shape)

    def stop(self, rule: str) -> float:
        """Where the picture of a rule is taken: its pick, or the last iterate where it found none."""
        pick = self.picks[rule].iteration
        return float(self.run.history.last) if pick is None else pick


def reconstruct(
    measurement: Measurement, grid: Grid, method: Method
) -> Generator[Progress, None, Reconstruction]:
    """Runs the iteration on one grid to its full length and lets every rule judge its history.

    Yields
    ------
    Progress

    Returns
    -------
    Reconstruction
    """
    constant = fit_background(measurement) if method.background is None else method.background
    # Relative to the background, solutions have no unit; the iterates do not depend on the scale.
    deviation = abs(constant) or 1.0
    standard = standard_form(
        measurement,
        PriorRoot(grid, method.correlation, method.smoothness, deviation),
        np.full(grid.n_nodes, constant),
    )
    run = yield from iterate(method.solver, standard.operator, standard.b, method.iterations)
    picks = {name: rule(run.history, method.options) for name, rule in method.rules.items()}
    return Reconstruction(grid, measurement, standard, run, picks)
