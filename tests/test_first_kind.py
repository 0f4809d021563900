"""First-kind integral equations with published answers: order of convergence in the noise, and stops."""

from __future__ import annotations

from itertools import islice
from typing import Any

import numpy as np
import pytest

from dense_rows import DenseRows
from published_problems import PROBLEMS
from stillground import plugins
from stillground.grid import Grid
from stillground.operators.prior_root import PriorRoot
from stillground.progress import finish
from stillground.protocols import Array, RuleOptions
from stillground.solve import iterate
from stillground.solve.cgls import cgls
from stillground.solve.lsqr import lsqr
from stillground.stopping.discrepancy import discrepancy

N = 400


def integration() -> Array:
    """Integration from 0 over [0, 1] by trapezoids in standard form: dense, Euclidean on both sides."""
    grid = Grid((0.0,), (1 / (N - 1),), (N,))
    A = np.tril(np.full((N, N), grid.spacing[0]))
    A[:, 0] *= 0.5
    A[np.diag_indices(N)] *= 0.5
    root = np.sqrt(grid.weights())
    return np.asarray(root[:, None] * A / root)


def beside(basis: Array, vector: Array) -> Array:
    """An orthonormal basis with a vector more, by Gram-Schmidt three times over."""
    for _ in range(3):
        vector = vector - basis @ (basis.T @ vector)
    return np.column_stack([basis, vector / np.linalg.norm(vector)])


def krylov_minimisers(A: Array, b: Array, last: int) -> list[Array]:
    """Least residuals over A^T of the first k of b, A A^T b, ...: orthonormal bases, then least squares."""
    here, there = beside(np.empty((b.size, 0)), b), np.empty((A.shape[1], 0))
    found = []
    for _ in range(last):
        there = beside(there, A.T @ here[:, -1])
        found.append(there @ np.linalg.lstsq(A @ there, b, rcond=None)[0])
        here = beside(here, A @ there[:, -1])
    return found


@pytest.mark.parametrize("solver", [lsqr, cgls])
def test_orthogonal_iterates_are_those_of_a_dense_krylov_minimiser(solver: Any) -> None:
    # The definition of both methods, dense (numpy.linalg), where singular values fall fast.
    grid = Grid((0.0,), (1 / (N - 1),), (N,))
    weights = np.sqrt(grid.weights())
    root = PriorRoot(grid, (0.3,), 2.0).todense()
    A = integration() @ (weights[:, None] * root)
    noise = np.random.default_rng(0).standard_normal(N)
    b = weights * (np.sin(3 * grid.axes[0]) + 0.01 * noise)
    wanted = krylov_minimisers(A, b, 30)
    operator = DenseRows(A, np.zeros(N, dtype=np.int64))

    def gap(reorthogonal: bool) -> float:
        steps = islice(solver(operator, b[:, None], reorthogonal=reorthogonal), 1, 31)
        return max(
            float(np.linalg.norm(step.solution[:, 0] - x) / np.linalg.norm(x))
            for step, x in zip(steps, wanted, strict=True)
        )

    assert gap(reorthogonal=True) < 1e-10
    assert gap(reorthogonal=False) > 1e-2, "the plain recurrences do leave it"


@pytest.mark.parametrize("mu", [0.5, 1.0])
def test_the_error_at_the_discrepancy_pick_has_the_order_of_the_source_condition(mu: float) -> None:
    # Nemirovskii (1986), USSR Comput. Math. Math. Phys. 26; Hanke (1995): for x = (A^T A)^mu w conjugate
    # gradients with the discrepancy rule err by noise^(2 mu / (2 mu + 1)), and no method does better. Source
    # and noise have as much in every octave of waves, so that the bound is met.
    U, s, Vt = np.linalg.svd(integration())
    random = np.random.default_rng(1)
    octaves = np.arange(1, N + 1) ** -0.5
    w = octaves * random.choice([-1.0, 1.0], N)
    x = Vt.T @ (s ** (2 * mu) * w)
    clean = U @ (s ** (2 * mu + 1) * w)
    noise = U @ (octaves * random.choice([-1.0, 1.0], N))
    noise /= np.linalg.norm(noise)
    levels = np.logspace(-1, -4, 13)
    errors = []
    for level in levels:
        size = level * np.linalg.norm(clean)
        # In standard form data have unit errors: noise of norm sqrt(n).
        unit = np.sqrt(N) / size
        A = DenseRows(unit * (U * s) @ Vt, np.zeros(N, dtype=np.int64))
        (run,) = finish(iterate(lsqr, A, unit * (clean + size * noise)[:, None], 120, probes=0))
        pick = discrepancy(run.history, RuleOptions(tau=1.1)).iteration
        assert pick is not None
        errors.append(float(np.linalg.norm(run.solution(pick) - x)))
    slope = np.polyfit(np.log(levels), np.log(errors), 1)[0]
    assert slope == pytest.approx(2 * mu / (2 * mu + 1), abs=0.1)


def made(name: str, n: int = 201) -> tuple[Array, Array, Array, Grid]:
    """Operator on nodal values by trapezoids, exact solution, exact data."""
    problem, (a, b), (c, d), _ = PROBLEMS[name]
    grid = Grid((c,), ((d - c) / (n - 1),), (n,))
    kernel, solution, data = problem(np.linspace(a, b, n), grid.axes[0])
    A = kernel * grid.weights()
    return A, solution, A @ solution if data is None else data, grid


@pytest.mark.parametrize("name", ["phillips", "baart"])
def test_published_data_are_those_of_the_published_solution(name: str) -> None:
    A, solution, data, _ = made(name)
    np.testing.assert_allclose(A @ solution, data, atol=3e-4 * np.abs(data).max())


def ratios(name: str, seed: int) -> dict[str, float]:
    """Error of each rule's picture over that of the best iterate, data with errors of a thousandth."""
    A, solution, data, grid = made(name)
    sigma = 1e-3 * float(np.sqrt(np.mean(data**2)))
    noise = np.random.default_rng(seed).standard_normal(data.size)
    root = PriorRoot(grid, (PROBLEMS[name][3],), 2.0).todense()
    operator = DenseRows(A @ root / sigma, np.zeros(data.size, dtype=np.int64))
    (run,) = finish(iterate(lsqr, operator, (data / sigma + noise)[:, None], 15))
    best = min(grid.norm(root @ x - solution) for x in run.solutions)
    found = {}
    for plugin in plugins.registered("rules"):
        pick = plugins.rule(plugin.name)(run.history, RuleOptions()).iteration
        stop = run.history.last if pick is None else pick
        found[plugin.name] = grid.norm(root @ run.solution(stop) - solution) / best
    return found


# Singular values fall so fast that one iterate too many may cost a factor of thousands: a law of the median.
# Quasi-optimality has none here.
FACTORS = {
    "gcv": 2.5,
    "discrepancy": 2.5,
    "risk": 2.5,
    "monotone-error": 3.0,
    "whiteness": 2.5,
    "l-curve": 3.0,
    "hanke-raus": 12.0,
}


@pytest.mark.parametrize("name", PROBLEMS)
def test_rules_stop_within_a_factor_of_the_best_iterate_in_the_median(name: str) -> None:
    all_ = [ratios(name, seed) for seed in range(11)]
    medians = {rule: float(np.median([found[rule] for found in all_])) for rule in FACTORS}
    assert all(medians[rule] < limit for rule, limit in FACTORS.items()), medians
