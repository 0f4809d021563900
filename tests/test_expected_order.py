"""Laws of the expected order, measured: representers, products and iterates on priors of every smoothness."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from itertools import pairwise

import numpy as np
import pytest
from pylops import LinearOperator, MatrixMult

from stillground.grid import Grid, ladder, prolong
from stillground.operators.prior_root import PriorRoot
from stillground.operators.straight_rays import StraightRays
from stillground.physics.straight_ray import StraightRay
from stillground.progress import finish
from stillground.protocols import Measurement
from stillground.reconstruct import Method, reconstruct
from stillground.refinement import climb, expected_order, rough_limit
from stillground.solve.lsqr import lsqr
from stillground.stopping.gcv import gcv

SMOOTHNESS = (0.0, 0.25, 0.5, 0.75, 1.0, 1.5, 2.0)
ENDS = np.sort(np.random.default_rng(3).uniform(0, 1, (40, 2)), axis=1)


def intervals(grid: Grid) -> MatrixMult:
    """Integrals over ``ENDS`` of functions linear between the nodes, exact."""
    (h,), (nodes,) = grid.spacing, grid.axes

    def upto(end: np.ndarray) -> np.ndarray:
        u = np.clip((end[:, None] - nodes) / h, -1, 1)
        whole = h * np.where(u < 0, (u + 1) ** 2 / 2, 1 - (1 - u) ** 2 / 2)
        whole[:, 0] -= h / 2
        return np.asarray(whole)

    return MatrixMult(upto(ENDS[:, 1]) - upto(ENDS[:, 0]))


def downhole(grid: Grid) -> Measurement:
    """Data over ``1 + 0.2 cos 5t + 0.1 cos 13t`` in closed form, with noise."""
    integral = ENDS + 0.2 * np.sin(5 * ENDS) / 5 + 0.1 * np.sin(13 * ENDS) / 13
    errors = np.full(40, 1e-3)
    noise = np.random.default_rng(5).normal(size=40)
    return Measurement(intervals(grid), integral[:, 1] - integral[:, 0] + errors * noise, errors)


def crossing(grid: Grid) -> LinearOperator:
    depths = np.array([-22.5, -13.6, -8.6])
    starts = np.column_stack([np.zeros(9), np.repeat(depths, 3)])
    return StraightRays(grid, starts, np.column_stack([np.full(9, 18.0), np.tile(depths, 3) + 0.37]))


def orders(changes: Sequence[float]) -> np.ndarray:
    return np.asarray(-np.diff(np.log2(changes)))


def representers(
    operator: Callable[[Grid], LinearOperator], grids: Sequence[Grid], lengths: tuple[float, ...], s: float
) -> tuple[float, float]:
    """Last observed orders of ``C a`` in L2 and of the variances ``<a, C a>``."""
    fields, variances = [], []
    for grid in grids:
        seen, root = operator(grid), PriorRoot(grid, lengths, s)
        coefficients = root.rmatmat(seen.rmatmat(np.eye(seen.shape[0])))
        fields.append(root.matmat(coefficients)[:, 3].reshape(grid.shape))
        variances.append(np.sum(coefficients**2, axis=0))
    pairs = pairwise(zip(fields, grids, strict=True))
    moved = [after.norm(b - prolong(a, before, after)) for (a, before), (b, after) in pairs]
    return orders(moved)[-1], orders([np.abs(b - a).max() for a, b in pairwise(variances)])[-1]


@pytest.mark.parametrize("smoothness", SMOOTHNESS[2:])
def test_rays_in_a_section_have_the_order_of_their_variances(smoothness: float) -> None:
    """Outside source: the trace theorem, a line in the plane is a functional in H^(-1/2) (from memory)."""
    r = StraightRay.regularity
    grids = ladder((-2.0, -27.0), (20.0, 1.0), (0.0625, 0.0625), 4)
    field, variance = representers(crossing, grids, (4.0, 4.0), smoothness)
    assert field == pytest.approx(min(2, 2 * smoothness + r), abs=0.1)
    assert variance == pytest.approx(expected_order(smoothness, r), abs=0.3)
    assert field >= expected_order(smoothness, r) - 0.1


@pytest.mark.parametrize("smoothness", SMOOTHNESS)
def test_intervals_have_the_order_of_their_representers(smoothness: float) -> None:
    """Outside source: a step is in H^(1/2) but for an arbitrarily small rest (from memory)."""
    grids = ladder((0.0,), (1.0,), (1 / 1024,), 7)
    method = Method((0.2,), smoothness, lsqr, 5, {"gcv": gcv}, "gcv")
    pictures = [finish(reconstruct(downhole(grid), grid, method)).model(2) for grid in grids]
    pairs = pairwise(zip(pictures, grids, strict=True))
    changes = [after.norm(b - prolong(a, before, after)) for (a, before), (b, after) in pairs]
    observed = np.log2(changes[-4] / changes[-1]) / 3
    assert observed == pytest.approx(expected_order(smoothness, 0.5), abs=0.1)


def test_there_is_a_limit_only_on_priors_smoother_than_the_data_are_rough() -> None:
    r = StraightRay.regularity
    assert [expected_order(s, r) > 0 for s in (0.0, 0.5, 0.51)] == [False, False, True]
    assert [expected_order(s, -1.0) > 0 for s in (1.0, 1.01)] == [False, True], "lines in three dimensions"
    assert expected_order(0.0, 0.5) == 0.5


def test_each_rough_prior_has_its_own_reason() -> None:
    assert "no bounded functional" in (rough_limit(0.0, -0.5) or "")
    assert "the limit is a staircase" in (rough_limit(0.0, 0.5) or "")
    assert "not drift" in (rough_limit(0.0, 0.5) or "")
    assert rough_limit(1.0, -0.5) is rough_limit(2.0, -0.5) is rough_limit(0.5, 0.5) is None


def test_a_white_prior_on_intervals_is_slow_and_not_drifting() -> None:
    grids = ladder((0.0,), (1.0,), (1 / 64,), 4)
    method = Method((0.2,), 0.0, lsqr, 5, {"gcv": gcv}, "gcv")
    found = finish(climb(downhole, grids, method, 0.02, 0.5)).ladder
    assert found.change[-1] > 0.02
    assert found.verdict.word == "undecided", found.verdict.reason
    assert found.verdict.expected == 0.5
    assert "staircase" in found.verdict.reason
