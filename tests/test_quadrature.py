"""Laws of quadrature rules and of grids that carry one."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.testing import assert_allclose, assert_array_equal
from scipy.integrate import simpson

from stillground.errors import GridError
from stillground.grid import Grid, carry, ladder_up_to, prolong
from stillground.quadrature import RULES, Quadrature

every_rule = pytest.mark.parametrize("rule", RULES.values(), ids=list(RULES))
# Highest degree that a panel integrates exactly (Davis & Rabinowitz 1984, chapter 2).
DEGREES = {"trapezoid": 1, "simpson": 3, "gauss-2": 3, "gauss-3": 5}


def line(rule: Quadrature, intervals: int, length: float = 3.0, **more: bool) -> Grid:
    return Grid((-1.0,), (length / intervals,), (rule.n_nodes(intervals),), rule, **more)


@every_rule
def test_a_rule_is_exact_up_to_its_degree_and_not_beyond(rule: Quadrature) -> None:
    # Davis & Rabinowitz (1984): the integral of (x + 1)^p over [-1, 2] is 3^(p + 1) / (p + 1).
    grid = line(rule, 4)
    for power in range(DEGREES[rule.name] + 2):
        found, exact = grid.weights() @ (grid.axes[0] + 1) ** power, 3.0 ** (power + 1) / (power + 1)
        assert (abs(found / exact - 1) < 1e-13) == (power <= DEGREES[rule.name])


def test_simpson_weights_are_those_of_scipy() -> None:
    # scipy.integrate.simpson, on random values.
    grid = line(RULES["simpson"], 12)
    values = np.random.default_rng(0).normal(size=13)
    assert grid.weights() @ values == pytest.approx(simpson(values, x=grid.axes[0]), rel=1e-13)


@every_rule
def test_a_grid_keeps_its_extent_when_it_is_refined(rule: Quadrature) -> None:
    grid = line(rule, 6)
    fine = grid.refined()
    assert fine.lengths == pytest.approx(grid.lengths)
    assert fine.intervals == (12,)
    assert fine.weights().sum() == pytest.approx(3.0, rel=1e-13)
    assert fine.rule is rule
    if rule.even:
        assert_array_equal(fine.axes[0][::2], grid.axes[0])


@every_rule
def test_linear_fields_are_carried_exactly_and_constants_survive_local_means(rule: Quadrature) -> None:
    coarse = Grid((-1.0, 0.0), (0.5, 0.25), (rule.n_nodes(4), rule.n_nodes(6)), rule)
    fine = coarse.refined()

    def field(grid: Grid) -> np.ndarray:
        return 2.0 + grid.axes[0][:, None] - 3.0 * grid.axes[1]

    assert_allclose(prolong(field(coarse), coarse, fine), field(fine), atol=1e-13)
    assert_allclose(carry(field(fine), fine, coarse), field(coarse), atol=1e-13)
    assert_allclose(coarse.local_mean(np.full(coarse.shape, 1.7), (0.4, 0.6)), 1.7, rtol=1e-13)


def test_local_means_over_uneven_nodes_are_those_over_even_ones() -> None:
    # Gaussian means with mirrors at the ends: of a cosine of the extent exp(-(k sigma)^2 / 2) is left.
    for rule in (RULES["gauss-2"], RULES["gauss-3"], RULES["trapezoid"]):
        grid = line(rule, 96)
        wave = np.cos(2 * np.pi * (grid.axes[0] + 1) / 3)
        damped = np.exp(-0.5 * (2 * np.pi / 3 * 0.15) ** 2)
        assert_allclose(grid.local_mean(wave, (0.3,)), damped * wave, atol=2e-4)


def test_carrying_takes_nodes_that_both_have_as_they_are() -> None:
    coarse = Grid((-1.0, 0.0), (0.5, 0.3), (5, 7))
    values = np.random.default_rng(1).normal(size=(9, 13, 2))
    assert_array_equal(carry(values, coarse.refined(), coarse), values[::2, ::2])


@every_rule
def test_a_ladder_up_to_a_grid_refines_to_it(rule: Quadrature) -> None:
    rungs = ladder_up_to(line(rule, 24), 3)
    assert [rung.intervals for rung in rungs] == [(6,), (12,), (24,)]
    assert rungs[0].refined() == rungs[1]
    assert rungs[1].refined() == rungs[2] == line(rule, 24)


def test_intervals_that_do_not_pair_so_often_are_refused_with_how_often_they_do() -> None:
    with pytest.raises(GridError, match="12 intervals with trapezoid weights make 3 rungs and not 4"):
        ladder_up_to(line(RULES["trapezoid"], 12), 4)
    with pytest.raises(GridError, match="12 intervals with simpson weights make 2 rungs and not 3"):
        ladder_up_to(line(RULES["simpson"], 12), 3)


def test_counts_that_do_not_fit_a_rule_are_refused() -> None:
    with pytest.raises(GridError, match="simpson takes 2 intervals at a time; 5 do not divide"):
        RULES["simpson"].n_nodes(5)
    with pytest.raises(GridError, match="gauss-3 has 3 new nodes a panel; 7 nodes do not fit"):
        Grid((0.0,), (1.0,), (7,), RULES["gauss-3"])
