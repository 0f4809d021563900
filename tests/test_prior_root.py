"""Laws of the prior root: a true adjoint, and a Matérn covariance that does not know the grid."""

from __future__ import annotations

import math
from dataclasses import replace
from itertools import pairwise

import numpy as np
import pytest
from numpy.testing import assert_allclose
from pylops import LinearOperator
from pylops.utils import dottest
from scipy.special import kv

from stillground.errors import GridError
from stillground.grid import Grid, carry, ladder
from stillground.operators.prior_root import PriorRoot
from stillground.quadrature import RULES

SHAPES = [
    Grid((0.0,), (0.5,), (2,)),
    Grid((3.0,), (0.2,), (12,)),
    Grid((0.0, -4.0), (0.5, 0.3), (2, 7)),
    Grid((0.0, -4.0), (1.0, 0.25), (5, 9)),
    Grid((0.0, 0.0, -4.0), (1.0, 0.5, 0.25), (3, 4, 5)),
    Grid((0.0,), (0.5,), (9,), RULES["simpson"]),
    Grid((0.0, -4.0), (1.0, 0.25), (6, 9), RULES["gauss-3"]),
    Grid((0.0, -4.0), (1.0, 0.25), (5, 9), weighted=False),
]


def covariances(grid: Grid, root: PriorRoot, place: tuple[float, ...]) -> np.ndarray:
    """Covariance of the value at the node nearest to ``place`` with all others, nodal field."""
    here = np.zeros(grid.shape)
    here[tuple(int(np.argmin(np.abs(x - p))) for x, p in zip(grid.axes, place, strict=True))] = 1
    return (root @ (root.T @ here.reshape(-1))).reshape(grid.shape)


def whittle(r: np.ndarray) -> np.ndarray:
    """r K_1(r), 1 at 0: the correlation in the plane for s = 2 (Whittle 1954), r in lengths."""
    return np.where(r > 0, r * kv(1, np.where(r > 0, r, 1.0)), 1.0)


@pytest.mark.parametrize(
    "grid", SHAPES, ids=lambda grid: f"{grid.rule.name}-{'x'.join(map(str, grid.shape))}"
)
@pytest.mark.parametrize("smoothness", [0.0, 0.7, 2.0])
def test_the_adjoint_is_the_transpose(grid: Grid, smoothness: float) -> None:
    root = PriorRoot(grid, np.linspace(0.6, 1.7, len(grid.shape)), smoothness, 1.3)
    forward, adjoint = root.matmat(np.eye(grid.n_nodes)), root.rmatmat(np.eye(grid.n_nodes))
    assert isinstance(root, LinearOperator)
    assert_allclose(adjoint, forward.T, rtol=0, atol=1e-12 * np.abs(forward).max())
    assert_allclose(
        forward[:, -1], root @ np.eye(grid.n_nodes)[-1], rtol=0, atol=1e-12 * np.abs(forward).max()
    )
    assert dottest(root, *root.shape, rtol=1e-10)


def test_the_covariance_in_the_plane_is_the_matern_form() -> None:
    """Outside source: Whittle (1954), correlation (r/l) K_1(r/l) for s = 2 in two dimensions."""
    # Waves shorter than two spacings are missing: (h / pi l)^2 of the variance.
    grid = Grid((0.0, -24.0), (0.125, 0.125), (193, 193))
    found = covariances(grid, PriorRoot(grid, (1.5, 1.5), 2.0), (12.0, -12.0))
    x, z = np.meshgrid(*grid.axes, indexing="ij")
    r = np.hypot(x - 12, z + 12) / 1.5
    near = r < 6  # the edges, 8 lengths away, mirror
    tolerance = 1.5 * (0.125 / (np.pi * 1.5)) ** 2
    assert_allclose(found[near], whittle(r[near]), rtol=0, atol=tolerance)


def test_lengths_stretch_the_covariance_along_their_axes() -> None:
    """Outside source: Whittle (1954) in coordinates divided by the lengths."""
    grid = Grid((0.0, -20.0), (0.25, 0.125), (241, 161))
    found = covariances(grid, PriorRoot(grid, (4.0, 1.25), 2.0), (30.0, -10.0))
    x, z = np.meshgrid(*grid.axes, indexing="ij")
    near = (np.abs(x - 30) < 20) & (np.abs(z + 10) < 7)
    assert_allclose(found[near], whittle(np.hypot((x - 30) / 4.0, (z + 10) / 1.25))[near], rtol=0, atol=2e-3)


def test_the_covariance_on_a_line_is_exponential() -> None:
    """Outside source: exp(-r/l) for s = 1 in one dimension (Ornstein-Uhlenbeck), from memory."""
    grid = Grid((-15.0,), (0.005,), (6001,))
    found = covariances(grid, PriorRoot(grid, (1.5,), 1.0), (0.0,))
    # Waves shorter than two spacings are missing: 2 h / pi^2 l of the variance.
    assert_allclose(found, np.exp(-np.abs(grid.axes[0]) / 1.5), rtol=0, atol=3 * 0.005 / (np.pi**2 * 1.5))


@pytest.mark.parametrize(
    ("d", "smoothness", "spacing"),
    [(1, 1.0, 0.01), (1, 2.0, 0.1), (2, 1.5, 0.05), (2, 2.0, 0.1), (3, 3.0, 0.4)],
)
def test_the_variance_at_a_point_far_from_the_edges_is_one(d: int, smoothness: float, spacing: float) -> None:
    n = 2 * round(5 / spacing) + 1
    grid = Grid((0.0,) * d, (spacing,) * d, (n,) * d)
    middle = (5.0,) * d
    assert covariances(grid, PriorRoot(grid, (1.0,) * d, smoothness), middle).max() == pytest.approx(
        1, abs=0.02
    )


def test_covariances_at_fixed_points_converge_under_refinement() -> None:
    """At fixed points, near edges too, every rung has the same covariance up to the waves it lacks."""
    grids = ladder((0.0, -8.0), (12.0, 0.0), (0.125, 0.125), 4)
    coarse = grids[0].axes
    tables = []
    for rung, grid in enumerate(grids):
        step = 2**rung
        points = [(0.0, 0.0), (6.0, -4.0), (2.0, -7.0)]
        root = PriorRoot(grid, (3.0, 2.0), 2.0)
        tables.append(np.array([covariances(grid, root, p)[::step, ::step] for p in points]))
        assert_allclose(grid.axes[0][::step], coarse[0])
    change = [float(np.abs(b - a).max()) for a, b in pairwise(tables)]
    assert change[0] < 0.1 * tables[-1].max()
    for before, after in pairwise(change):
        assert 3.5 < before / after < 4.5


def test_the_white_root_is_the_quadrature_alone() -> None:
    grid = SHAPES[3]
    root = PriorRoot(grid, (1.0, 2.0), 0.0)
    dense = root.matmat(np.eye(grid.n_nodes))
    covariance = dense @ dense.T
    scale = covariance[0, 0] * grid.weights()[0]
    assert_allclose(covariance, np.diag(scale / grid.weights()), rtol=0, atol=1e-12 * covariance.max())


@pytest.mark.parametrize("smoothness", [0.0, 0.5, 1.0])
def test_rough_priors_keep_the_variance_of_long_waves(smoothness: float) -> None:
    """Where points have no variance, the mean over the grid has that of s = d/2 + 1."""
    grid = SHAPES[3]
    mean = grid.weights() / math.prod(grid.lengths)
    rough = PriorRoot(grid, (1.0, 2.0), smoothness).T @ mean
    smooth = PriorRoot(grid, (1.0, 2.0), 2.0).T @ mean
    assert rough @ rough == pytest.approx(smooth @ smooth, rel=1e-12)


def test_the_deviation_scales() -> None:
    grid = SHAPES[3]
    field = np.random.default_rng(0).normal(size=grid.n_nodes)
    one, other = PriorRoot(grid, (1.0, 2.0), 2.0), PriorRoot(grid, (1.0, 2.0), 2.0, 5e-4)
    assert_allclose(other @ field, 5e-4 * (one @ field), rtol=1e-13)


def test_one_worker_or_many_give_the_same(monkeypatch: pytest.MonkeyPatch) -> None:
    grid = Grid((0.0, 0.0), (1.0, 1.0), (33, 41))
    root = PriorRoot(grid, (3.0, 3.0), 2.0)
    field = np.random.default_rng(0).normal(size=(grid.n_nodes, 2))
    alone = root.matmat(field)
    monkeypatch.setattr("stillground.operators.prior_root._WORTH_THREADS", 0)
    assert np.array_equal(root.matmat(field), alone)


@pytest.mark.parametrize("lengths", [(1.0,), (1.0, 1.0, 1.0), (1.0, 0.0), (1.0, math.inf), (math.nan, 1.0)])
def test_lengths_that_are_no_lengths_are_refused(lengths: tuple[float, ...]) -> None:
    with pytest.raises(GridError, match="one positive correlation length for each axis"):
        PriorRoot(SHAPES[3], lengths, 2.0)


@pytest.mark.parametrize("smoothness", [-0.1, math.nan, math.inf])
def test_a_smoothness_that_is_no_number_from_zero_up_is_refused(smoothness: float) -> None:
    with pytest.raises(GridError, match="smoothness"):
        PriorRoot(SHAPES[3], (1.0, 1.0), smoothness)


@pytest.mark.parametrize(("name", "order"), [("simpson", 3), ("gauss-2", 2), ("gauss-3", 2)])
def test_the_covariance_at_fixed_points_does_not_know_the_rule(name: str, order: int) -> None:
    """Outside source: (1 + r/l) exp(-r/l) for s = 2 on a line (Whittle 1954; Matern 3/2, from memory)."""
    places = Grid((0.0,), (1.0,), (17,))
    far = np.abs(places.axes[0] - 8) < 4
    r = np.abs(places.axes[0] - 8) / 0.75
    gaps = []
    for intervals in (128, 256):
        rule = RULES[name]
        grid = Grid((0.0,), (16 / intervals,), (rule.n_nodes(intervals),), rule)
        root = carry(PriorRoot(grid, (0.75,), 2.0).todense(), grid, places)
        even = Grid((0.0,), (16 / intervals,), (intervals + 1,))
        trapezoid = carry(PriorRoot(even, (0.75,), 2.0).todense(), even, places)
        gaps.append(np.abs(root @ root.T - trapezoid @ trapezoid.T).max())
        # Waves that panels confuse hold (h/l)^3 of the variance; between Gauss nodes, values are linear.
        bound = (grid.spacing[0] / 0.75) ** order
        assert_allclose((root @ root.T)[8][far], ((1 + r) * np.exp(-r))[far], atol=bound)
        # At the edges too.
        assert gaps[-1] < bound
    assert gaps[0] / gaps[1] == pytest.approx(2**order, rel=0.15)


def test_waves_made_orthogonal_are_the_cosine_transform_where_they_were() -> None:
    # scipy.fft.dctn of type 1, orthogonal with the trapezoid's weights, stands behind the plain one.
    grid = Grid((0.0,), (0.5,), (33,), replace(RULES["trapezoid"], name="trapezoid, spelt out"))
    plain = PriorRoot(Grid((0.0,), (0.5,), (33,)), (2.0,), 1.0)
    assert_allclose(PriorRoot(grid, (2.0,), 1.0).todense(), plain.todense(), atol=1e-13)


@pytest.mark.parametrize("name", RULES)
@pytest.mark.parametrize("intervals", [2, 6, 64])
def test_the_white_root_of_every_rule_is_the_quadrature_alone(name: str, intervals: int) -> None:
    rule = RULES[name]
    grid = Grid((0.0,), (0.5,), (rule.n_nodes(intervals),), rule)
    dense = PriorRoot(grid, (1.0,), 0.0).todense()
    covariance = dense @ dense.T * grid.weights()
    assert_allclose(covariance, covariance[0, 0] * np.eye(grid.n_nodes), atol=1e-12 * covariance[0, 0])


def test_without_weights_the_root_takes_the_field_for_a_vector() -> None:
    grid = Grid((0.0,), (0.5,), (9,), RULES["simpson"], weighted=False)
    root = PriorRoot(grid, (1.0,), 2.0, 3.0)
    assert_allclose(root.todense(), 3.0 * np.eye(9), atol=0)


@pytest.mark.parametrize(
    "grid", SHAPES, ids=lambda grid: f"{grid.rule.name}-{'x'.join(map(str, grid.shape))}"
)
def test_the_inverse_undoes_the_root(grid: Grid) -> None:
    root = PriorRoot(grid, np.linspace(0.6, 1.7, len(grid.shape)), 1.0)
    field = np.random.default_rng(2).normal(size=(grid.n_nodes, 2))
    assert_allclose(root.matmat(root.inverse(field)), field, atol=1e-11)
