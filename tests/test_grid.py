"""Laws of grids: quadrature, refinement, transfer between rungs."""

from __future__ import annotations

import math
from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose

from stillground.errors import GridError
from stillground.grid import Grid, ladder, prolong

laws = settings(derandomize=True, deadline=None, max_examples=150)
length = st.floats(0.01, 50, allow_subnormal=False)
Extent = tuple[list[float], list[float], list[float], int]


@st.composite
def grids(draw: st.DrawFn) -> Grid:
    d = draw(st.integers(1, 3))
    origin = draw(st.lists(st.floats(-500, 500), min_size=d, max_size=d))
    spacing = draw(st.lists(length, min_size=d, max_size=d))
    shape = draw(st.lists(st.integers(2, 6), min_size=d, max_size=d))
    return Grid(tuple(origin), tuple(spacing), tuple(shape))


@st.composite
def extents(draw: st.DrawFn) -> Extent:
    """Lower, upper, spacing and levels for which a ladder exists."""
    d, levels = draw(st.integers(1, 3)), draw(st.integers(1, 5))
    spacing = draw(st.lists(length, min_size=d, max_size=d))
    lower = draw(st.lists(st.floats(-1000, 1000), min_size=d, max_size=d))
    intervals = draw(st.lists(st.floats(2, 40), min_size=d, max_size=d))
    upper = [
        low + n * h * 2 ** (levels - 1) * (1 + 1e-6)
        for low, n, h in zip(lower, intervals, spacing, strict=True)
    ]
    return lower, upper, spacing, levels


def nodes(grid: Grid) -> np.ndarray:
    return np.stack([m.reshape(-1) for m in np.meshgrid(*grid.axes, indexing="ij")], axis=1)


def points_within(grid: Grid, n: int = 20) -> np.ndarray:
    share = np.random.default_rng(3).uniform(0.001, 0.999, (n, len(grid.shape)))
    return np.array(grid.origin) + share * np.array(grid.lengths)


@laws
@given(grid=grids())
def test_weights_sum_to_the_volume(grid: Grid) -> None:
    assert grid.weights().shape == (grid.n_nodes,)
    assert_allclose(grid.weights().sum(), math.prod(grid.lengths), rtol=1e-13)


@laws
@given(grid=grids(), data=st.data())
def test_quadrature_is_exact_for_multilinear_fields(grid: Grid, data: st.DataObject) -> None:
    """A product of (a + b x) over the axes integrates to a product of length (a + b x_middle)."""
    d = len(grid.shape)
    coefficients = np.array(data.draw(st.lists(st.floats(-2, 2), min_size=2 * d, max_size=2 * d))).reshape(
        d, 2
    )
    local = nodes(grid) - np.array(grid.origin)
    field = np.prod(coefficients[:, 0] + coefficients[:, 1] * local, axis=1)
    sides = np.array(grid.lengths)
    expected = np.prod(sides * (coefficients[:, 0] + coefficients[:, 1] * sides / 2))
    scale = np.prod(sides * (np.abs(coefficients[:, 0]) + np.abs(coefficients[:, 1]) * sides))
    # Subtracting the origin again costs the digits that it has more than the spacing.
    tolerance = 1e-12 * (1 + 1000 / min(grid.spacing)) * scale + 1e-300
    assert abs(grid.weights() @ field - expected) <= tolerance
    assert abs(grid.mean(field.reshape(grid.shape)) * np.prod(sides) - expected) <= tolerance


@laws
@given(grid=grids())
def test_weights_are_the_integrals_of_the_basis_functions(grid: Grid) -> None:
    """A hat of height 1 has h under it inside and h/2 at an end (common practice, no source)."""
    along = [[h / 2, *[h] * (n - 2), h / 2] for h, n in zip(grid.spacing, grid.shape, strict=True)]
    expected = np.prod(np.stack(np.meshgrid(*along, indexing="ij")), axis=0).reshape(-1)
    assert_allclose(grid.weights(), expected, rtol=1e-14)


@laws
@given(grid=grids())
def test_the_mean_is_the_nearest_constant(grid: Grid) -> None:
    field = np.random.default_rng(5).normal(size=grid.shape)
    mean = grid.mean(field)
    best = grid.norm(field - mean)
    assert all(grid.norm(field - mean - shift) > best for shift in (-0.01, 0.01))


@laws
@given(grid=grids(), constant=st.floats(0.01, 3))
def test_the_norm_of_a_constant_is_its_size_times_the_root_of_the_volume(grid: Grid, constant: float) -> None:
    expected = constant * math.sqrt(math.prod(grid.lengths))
    assert_allclose(grid.norm(np.full(grid.shape, constant)), expected, rtol=1e-12)


def test_the_norm_converges_at_order_two() -> None:
    """Trapezoid rule: second order for a smooth function (common practice, no source).

    The square integral of exp(x) sin(z) over [0, 1] x [0, 2] by hand:
    (e^2 - 1)/2 times (1 - sin(4)/4).
    """
    exact = math.sqrt((math.e**2 - 1) / 2 * (1 - math.sin(4) / 4))
    grid, errors = Grid((0.0, 0.0), (0.25, 0.25), (5, 9)), []
    for _ in range(5):
        x, z = grid.axes
        errors.append(abs(grid.norm(np.exp(x)[:, None] * np.sin(z)) - exact))
        grid = grid.refined()
    orders = np.log2(np.array(errors[:-1]) / errors[1:])
    assert_allclose(orders[-2:], 2.0, atol=0.02)


@laws
@given(extents())
def test_the_finest_rung_has_the_spacing_asked_for(
    extent: Extent,
) -> None:
    lower, upper, spacing, levels = extent
    rungs = ladder(lower, upper, spacing, levels)
    assert len(rungs) == levels
    assert rungs[-1].spacing == tuple(spacing)
    for coarse, fine in pairwise(rungs):
        assert coarse.spacing == tuple(2 * h for h in fine.spacing)


@laws
@given(extents())
def test_every_rung_covers_the_extent(extent: Extent) -> None:
    lower, upper, spacing, levels = extent
    for grid in ladder(lower, upper, spacing, levels):
        slack = 2e-9 * 2 ** (levels - 1) * np.array(spacing) + 1e-12
        assert np.all(np.array([axis[0] for axis in grid.axes]) <= np.array(lower) + slack)
        assert np.all(np.array([axis[-1] for axis in grid.axes]) >= np.array(upper) - slack)


@laws
@given(extents())
def test_the_extent_is_widened_alike_on_both_sides(
    extent: Extent,
) -> None:
    lower, upper, spacing, levels = extent
    coarse = ladder(lower, upper, spacing, levels)[0]
    before = (np.array(lower) - [axis[0] for axis in coarse.axes]) / coarse.spacing
    after = ([axis[-1] for axis in coarse.axes] - np.array(upper)) / coarse.spacing
    assert np.all(np.abs(before - after) < 2 + 1e-6)


@laws
@given(extents())
def test_nodes_of_the_rungs_are_nested(extent: Extent) -> None:
    rungs = ladder(*extent)
    for coarse, fine in pairwise(rungs):
        for few, many in zip(coarse.axes, fine.axes, strict=True):
            np.testing.assert_array_equal(many[::2], few)


@laws
@given(extents())
def test_the_coarsest_rung_has_a_smooth_count_and_a_round_origin(
    extent: Extent,
) -> None:
    coarse = ladder(*extent)[0]
    for count, origin, h in zip(coarse.shape, coarse.origin, coarse.spacing, strict=True):
        rest = count - 1
        for factor in (2, 3, 5):
            while rest % factor == 0:
                rest //= factor
        assert rest == 1
        assert origin == round(origin / h) * h


@pytest.mark.parametrize(
    ("needed", "intervals"),
    [(2, 2), (6, 6), (7, 8), (11, 12), (13, 15), (17, 18), (19, 20), (23, 24), (31, 32)],
)
def test_the_count_is_the_next_smooth_one(needed: int, intervals: int) -> None:
    """Numbers without a prime factor above 5, by hand."""
    assert ladder((0.0,), (float(needed),), (0.5,), 2)[0].shape == (intervals + 1,)


def test_an_extent_of_whole_spacings_is_not_widened_by_rounding() -> None:
    """0.1 has no exact binary form: 0.3 / 0.1 comes out below 3, and 6 * 0.1 / 0.1 above 6."""
    for low in range(-30, 30):
        grid = ladder((low * 0.1,), ((low + 12) * 0.1,), (0.1,), 1)[0]
        assert grid.shape == (13,)
        assert_allclose(grid.origin, (low * 0.1,), atol=1e-12)


@laws
@given(grid=grids(), times=st.integers(0, 2))
def test_prolonging_changes_nothing(grid: Grid, times: int) -> None:
    """Source: scipy.interpolate.RegularGridInterpolator on either rung."""
    values = np.random.default_rng(1).normal(size=grid.shape)
    fine = grid
    for _ in range(times):
        fine = fine.refined()
    prolonged, points = prolong(values, grid, fine), points_within(grid)
    assert prolonged.shape == fine.shape
    # A node's place is known to eps times the origin, and values change by about 1 in a spacing.
    tolerance = 1e-12 * (1 + 1000 / min(fine.spacing))
    assert_allclose(fine.interpolate(prolonged, points), grid.interpolate(values, points), atol=tolerance)
    assert_allclose(fine.mean(prolonged), grid.mean(values), atol=1e-13)


def test_prolonging_keeps_the_values_given() -> None:
    grid = Grid((0.0,), (1.0,), (3,))
    values = np.array([1.0, 2.0, 4.0])
    assert_allclose(prolong(values, grid, grid.refined()), [1.0, 1.5, 2.0, 3.0, 4.0], rtol=0, atol=0)
    assert_allclose(values, [1.0, 2.0, 4.0], rtol=0, atol=0)


@laws
@given(grid=grids())
def test_interpolation_is_exact_on_the_nodes_and_for_linear_fields(grid: Grid) -> None:
    slopes, points = np.array([0.3, -1.2, 0.7])[: len(grid.shape)], points_within(grid)
    field = nodes(grid) @ slopes
    assert_allclose(grid.interpolate(field, nodes(grid)), field, rtol=1e-12, atol=1e-12)
    assert_allclose(grid.interpolate(field, points), points @ slopes, rtol=0, atol=1e-10)


def test_elevation_ascends_along_the_last_axis_in_c_order() -> None:
    grid = Grid((0.0, -4.0), (1.0, 2.0), (2, 3))
    expected = [[0, -4], [0, -2], [0, 0], [1, -4], [1, -2], [1, 0]]
    np.testing.assert_array_equal(nodes(grid), expected)
    assert_allclose(grid.weights(), [0.5, 1, 0.5, 0.5, 1, 0.5])
    assert_allclose(grid.interpolate(np.arange(6.0), np.array(expected, dtype=float)), np.arange(6.0))


@pytest.mark.parametrize(
    ("origin", "spacing", "shape", "words"),
    [
        ((0.0,), (0.0,), (3,), r"spacings must be positive; got \(0.0,\)"),
        ((0.0,), (-1.0,), (3,), "spacings must be positive"),
        ((0.0,), (math.nan,), (3,), "spacings must be positive"),
        ((0.0,), (math.inf,), (3,), "spacings must be positive"),
        ((0.0, 0.0), (1.0, 1.0), (3, 1), r"at least 2 nodes along each axis; got \(3, 1\)"),
        ((0.0,), (1.0, 1.0), (3, 3), "got 1, 2 and 2"),
        ((0.0,) * 4, (1.0,) * 4, (3,) * 4, "a grid has 1, 2 or 3 axes"),
    ],
)
def test_an_impossible_grid_is_refused(
    origin: tuple[float, ...], spacing: tuple[float, ...], shape: tuple[int, ...], words: str
) -> None:
    with pytest.raises(GridError, match=words):
        Grid(origin, spacing, shape)


@pytest.mark.parametrize(
    ("lower", "upper", "spacing", "levels", "words"),
    [
        (0.0, 15.0, 1.0, 4, r"15 m across, too little for a coarsest rung of 8 m .*smaller ground\.spacing"),
        (0.0, 0.0, 1.0, 1, "0 m across"),
        (1.0, -5.0, 1.0, 1, "-6 m across"),
        (0.0, 5.0, 0.0, 1, "a positive spacing.* got 0 to 5 m, 0 m and 1"),
        (0.0, 5.0, -1.0, 1, "a positive spacing.* got 0 to 5 m, -1 m and 1"),
        (0.0, 5.0, math.nan, 1, "a positive spacing.* nan m and 1"),
        (math.nan, 5.0, 1.0, 1, "a finite extent.* got nan to 5 m"),
        (0.0, math.inf, 1.0, 1, "a finite extent.* got 0 to inf m"),
        (0.0, 5.0, 1.0, 0, "at least 1 rung; got 0 to 5 m, 1 m and 0"),
    ],
)
def test_an_impossible_ladder_is_refused(
    lower: float, upper: float, spacing: float, levels: int, words: str
) -> None:
    with pytest.raises(GridError, match=words):
        ladder((lower,), (upper,), (spacing,), levels)


def test_an_extent_of_two_coarsest_intervals_is_enough() -> None:
    assert ladder((0.0,), (16.0,), (1.0,), 4)[0].shape == (3,)


@pytest.mark.parametrize(
    "fine",
    [
        Grid((0.0, 0.0), (1.0, 1.0), (4, 5)),
        Grid((0.0, 0.5), (0.5, 0.5), (5, 5)),
        Grid((0.0, 0.0), (0.5, 0.25), (5, 5)),
        Grid((0.0, 0.0), (1.0, 1.0), (2, 2)),
        Grid((0.0,), (0.5,), (5,)),
    ],
    ids=["count", "origin", "spacing", "coarser", "axes"],
)
def test_prolonging_to_a_grid_off_the_ladder_is_refused(fine: Grid) -> None:
    coarse = Grid((0.0, 0.0), (1.0, 1.0), (3, 3))
    with pytest.raises(GridError, match="not rungs of one ladder"):
        prolong(np.zeros(coarse.shape), coarse, fine)


def test_prolonging_between_large_coordinates_tells_a_shift_of_a_node() -> None:
    """Elevations and distances may be thousands of metres while the spacing is a tenth of one."""
    coarse, shifted = Grid((50000.0,), (0.2,), (3,)), Grid((50000.1,), (0.1,), (5,))
    with pytest.raises(GridError, match="not rungs of one ladder"):
        prolong(np.zeros(3), coarse, shifted)
