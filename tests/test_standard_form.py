"""Laws of the standard form: weights enter once, and the way back leads to the ground."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.testing import assert_allclose
from pylops import MatrixMult

from stillground.grid import Grid
from stillground.operators.prior_root import PriorRoot
from stillground.protocols import Measurement
from stillground.standard_form import StandardForm, fit_background, standard_form

GRID = Grid((0.0, -3.0), (1.0, 0.5), (5, 7))
RNG = np.random.default_rng(11)
MATRIX = RNG.uniform(0, 1, (20, GRID.n_nodes))
MEASUREMENT = Measurement(MatrixMult(MATRIX), RNG.normal(size=20) + 9, RNG.uniform(0.1, 3, 20))
ROOT = PriorRoot(GRID, (2.0, 1.0), 2.0, 0.4)
BACKGROUND = RNG.normal(size=GRID.n_nodes)


@pytest.fixture
def standard() -> StandardForm:
    return standard_form(MEASUREMENT, ROOT, BACKGROUND)


def test_the_operator_is_whitening_times_measurement_times_root(standard: StandardForm) -> None:
    expected = MATRIX @ ROOT.matmat(np.eye(GRID.n_nodes)) / MEASUREMENT.errors[:, None]
    forward = standard.operator.matmat(np.eye(GRID.n_nodes))
    assert_allclose(forward, expected, rtol=0, atol=1e-12 * np.abs(expected).max())
    assert_allclose(
        standard.operator.rmatmat(np.eye(20)), expected.T, rtol=0, atol=1e-12 * np.abs(expected).max()
    )


def test_what_is_left_of_the_data_is_whitened(standard: StandardForm) -> None:
    expected = (MEASUREMENT.data - MATRIX @ BACKGROUND) / MEASUREMENT.errors
    assert_allclose(standard.b, expected, rtol=1e-12)


def test_the_residual_in_standard_form_is_that_of_the_ground(standard: StandardForm) -> None:
    solution = RNG.normal(size=GRID.n_nodes)
    ground = standard.ground(solution)
    assert_allclose(
        standard.b - standard.operator @ solution,
        (MEASUREMENT.data - MATRIX @ ground) / MEASUREMENT.errors,
        rtol=0,
        atol=1e-11 * np.abs(standard.b).max(),
    )


def test_no_solution_is_the_background(standard: StandardForm) -> None:
    assert_allclose(standard.ground(np.zeros(GRID.n_nodes)), BACKGROUND, rtol=1e-15)


def test_the_least_solution_in_standard_form_is_the_likeliest_ground(standard: StandardForm) -> None:
    """Outside source: the conditional mean of Gaussians, m0 + C A' (A C A' + E)^-1 (d - A m0).

    Damped by one, the least squares in standard form is that; no quadrature weight is in sight.
    """
    dense = standard.operator.matmat(np.eye(GRID.n_nodes))
    solution = np.linalg.solve(dense.T @ dense + np.eye(GRID.n_nodes), dense.T @ standard.b)
    root = ROOT.matmat(np.eye(GRID.n_nodes))
    covariance = root @ root.T
    inner = MATRIX @ covariance @ MATRIX.T + np.diag(MEASUREMENT.errors**2)
    gain = covariance @ MATRIX.T @ np.linalg.inv(inner)
    expected = BACKGROUND + gain @ (MEASUREMENT.data - MATRIX @ BACKGROUND)
    assert_allclose(standard.ground(solution), expected, rtol=0, atol=1e-9)


def test_the_background_is_the_constant_that_fits_best() -> None:
    """Outside source: `numpy.linalg.lstsq` on the whitened column."""
    column = (MATRIX @ np.ones(GRID.n_nodes) / MEASUREMENT.errors)[:, None]
    expected = np.linalg.lstsq(column, MEASUREMENT.data / MEASUREMENT.errors)[0][0]
    assert fit_background(MEASUREMENT) == pytest.approx(expected, rel=1e-12)
