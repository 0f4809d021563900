"""Laws of straight rays: exact on bilinear fields, second order on smooth ones, a true adjoint."""

from __future__ import annotations

import numpy as np
import pytest
import xarray as xr
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose, assert_array_equal
from pylops import LinearOperator
from pylops.optimization.basic import cgls as pylops_cgls
from pylops.optimization.basic import lsqr as pylops_lsqr
from pylops.utils import dottest
from scipy.sparse.linalg import lsmr, lsqr
from scipy.special import erf
from skimage.data import shepp_logan_phantom
from skimage.transform import radon, resize

from stillground.errors import GridError
from stillground.grid import Grid
from stillground.ground import Blob, Disc
from stillground.operators.straight_rays import StraightRays
from stillground.physics.straight_ray import StraightRay, StraightRaySettings

Rays = tuple[Grid, np.ndarray, np.ndarray]
laws = settings(derandomize=True, deadline=None, max_examples=150)


def nodes(grid: Grid) -> np.ndarray:
    return np.stack(np.meshgrid(*grid.axes, indexing="ij"), axis=-1).reshape(-1, 2)


def square(intervals: int, side: float = 10.0) -> Grid:
    return Grid((0.0, -side), (side / intervals,) * 2, (intervals + 1,) * 2)


def crosshole(grid: Grid, n: int) -> tuple[np.ndarray, np.ndarray]:
    """Every source of the left edge to every receiver of the right one."""
    x, z = grid.axes
    depths = np.linspace(z[0] + 0.013 * grid.lengths[1], z[-1] - 0.017 * grid.lengths[1], n)
    below, above = np.repeat(depths, n), np.tile(depths, n)
    return np.column_stack([np.full(n * n, x[0]), below]), np.column_stack([np.full(n * n, x[-1]), above])


def random_rays(grid: Grid, n: int, seed: int = 7) -> tuple[np.ndarray, np.ndarray]:
    rng = np.random.default_rng(seed)
    low, size = np.array(grid.origin), np.array(grid.lengths)
    return low + size * rng.uniform(0, 1, (n, 2)), low + size * rng.uniform(0, 1, (n, 2))


def bilinear(grid: Grid, field: np.ndarray, index: np.ndarray) -> np.ndarray:
    """The field at index coordinates, written out: no code shared with the package."""
    cell = np.minimum(index.astype(int), np.array(grid.shape) - 2)
    (u, v), (i, j), f = (index - cell).T, cell.T, field.reshape(grid.shape)
    return (
        (1 - u) * (1 - v) * f[i, j]
        + (1 - u) * v * f[i, j + 1]
        + u * (1 - v) * f[i + 1, j]
        + u * v * f[i + 1, j + 1]
    )


def quadrature(grid: Grid, start: np.ndarray, end: np.ndarray, field: np.ndarray) -> float:
    """Two Gauss points between every two grid lines: exact, since the field is quadratic there."""
    top = np.array(grid.shape) - 1.0
    a, b = (np.clip((p - np.array(grid.origin)) / grid.spacing, 0, top) for p in (start, end))
    cuts = [0.0, 1.0]
    for axis in range(2):
        if a[axis] != b[axis]:
            lines = np.arange(np.floor(min(a[axis], b[axis])), np.ceil(max(a[axis], b[axis])) + 1)
            cuts += list((lines - a[axis]) / (b[axis] - a[axis]))
    t = np.unique(np.clip(cuts, 0, 1))
    points, weights = np.polynomial.legendre.leggauss(2)
    places = 0.5 * (t[1:] + t[:-1])[:, None] + 0.5 * np.diff(t)[:, None] * points
    share = (0.5 * np.diff(t)[:, None] * weights).reshape(-1)
    index = np.clip(a + places.reshape(-1, 1) * (b - a), 0, top)
    return float(np.linalg.norm(end - start) * (share @ bilinear(grid, field, index)))


@st.composite
def awkward(draw: st.DrawFn) -> Rays:
    """Rays on nodes, edges and corners, along grid lines, steep, flat, reversed, tiny, of no length."""
    shape = draw(st.tuples(st.integers(2, 9), st.integers(2, 9)))
    spacing = draw(st.tuples(st.floats(0.05, 20), st.floats(0.05, 20)))
    origin = draw(st.tuples(st.floats(-100, 100), st.floats(-100, 100)))

    def place(n: int) -> st.SearchStrategy[float]:
        node = st.integers(0, n - 1).map(float)
        return st.one_of(
            node,
            st.floats(0, n - 1),
            st.builds(
                lambda k, d: float(np.clip(k + d, 0, n - 1)), node, st.sampled_from([-1e-9, 1e-12, 1e-5])
            ),
        )

    point = st.tuples(place(shape[0]), place(shape[1]))
    ends = []
    for _ in range(draw(st.integers(1, 5))):
        a, b = draw(point), draw(point)
        kinds = ["free", "along first", "along last", "tiny", "flat", "steep", "point", "reversed"]
        kind = draw(st.sampled_from(kinds))
        if kind == "along first":
            b = (b[0], a[1])
        elif kind == "along last":
            b = (a[0], b[1])
        elif kind == "tiny":
            b = tuple(a[i] + 1e-7 * (b[i] - a[i]) for i in range(2))
        elif kind == "flat":
            b = (a[0] + 1e-10 * (b[0] - a[0]), b[1])
        elif kind == "steep":
            b = (b[0], a[1] + 1e-10 * (b[1] - a[1]))
        elif kind == "point":
            b = a
        elif kind == "reversed" and ends:
            b, a = ends[-1]
        ends.append((a, b))
    index = np.array(ends, dtype=float)
    places = np.array(origin) + index * np.array(spacing)
    return Grid(origin, spacing, shape), places[:, 0], places[:, 1]


@laws
@given(rays=awkward(), seed=st.integers(0, 1000))
def test_integrals_of_bilinear_fields_are_exact(rays: Rays, seed: int) -> None:
    """Outside source: Gauss-Legendre quadrature between grid lines."""
    grid, starts, ends = rays
    field = np.random.default_rng(seed).normal(size=grid.n_nodes)
    expected = [quadrature(grid, s, e, field) for s, e in zip(starts, ends, strict=True)]
    lengths = np.linalg.norm(ends - starts, axis=1)
    # A ray shorter than a cell is still the difference of two sums along a whole row.
    scale = np.maximum(lengths, np.hypot(*grid.spacing)) * np.abs(field).max()
    assert np.all(np.abs(StraightRays(grid, starts, ends) @ field - expected) <= 1e-12 * scale)


@laws
@given(rays=awkward())
def test_the_adjoint_is_the_transpose(rays: Rays) -> None:
    operator = StraightRays(*rays)
    forward = operator.matmat(np.eye(operator.shape[1]))
    adjoint = operator.rmatmat(np.eye(operator.shape[0]))
    assert_allclose(adjoint, forward.T, rtol=0, atol=1e-12 * np.hypot(*rays[0].lengths))


@laws
@given(rays=awkward())
def test_rays_of_no_length_give_zero_and_unit_fields_give_lengths(rays: Rays) -> None:
    grid, starts, ends = rays
    lengths = np.linalg.norm(ends - starts, axis=1)
    found = StraightRays(grid, starts, ends) @ np.ones(grid.n_nodes)
    assert np.all(found[np.all(starts == ends, axis=1)] == 0)
    assert_allclose(found, lengths, rtol=0, atol=1e-12 * np.hypot(*grid.lengths))


@laws
@given(rays=awkward(), seed=st.integers(0, 1000))
def test_the_direction_of_a_ray_does_not_matter(rays: Rays, seed: int) -> None:
    grid, starts, ends = rays
    field = np.random.default_rng(seed).normal(size=grid.n_nodes)
    there, back = StraightRays(grid, starts, ends) @ field, StraightRays(grid, ends, starts) @ field
    assert_allclose(back, there, rtol=0, atol=1e-12 * np.hypot(*grid.lengths) * np.abs(field).max())


def test_larger_grids_are_exact_too() -> None:
    """Outside source: Gauss-Legendre quadrature between grid lines. Here sums along rows are long."""
    grid = Grid((3.0, -40.0), (0.11, 0.07), (181, 407))
    field = np.random.default_rng(3).normal(size=grid.n_nodes) + 5
    starts, ends = random_rays(grid, 60)
    expected = [quadrature(grid, s, e, field) for s, e in zip(starts, ends, strict=True)]
    lengths = np.linalg.norm(ends - starts, axis=1)
    error = np.abs(StraightRays(grid, starts, ends) @ field - expected)
    assert np.all(error <= 1e-12 * lengths * np.abs(field).max())


def blob_integrals(centre: np.ndarray, width: float, starts: np.ndarray, ends: np.ndarray) -> np.ndarray:
    """A Gaussian along a line is a Gaussian: exp(-p^2/2w^2) w sqrt(pi/2) [erf], from memory."""
    length = np.linalg.norm(ends - starts, axis=1)
    direction = (ends - starts) / length[:, None]
    first = np.sum((starts - centre) * direction, axis=1)
    across = (starts - centre)[:, 0] * direction[:, 1] - (starts - centre)[:, 1] * direction[:, 0]
    span = erf((first + length) / (width * np.sqrt(2))) - erf(first / (width * np.sqrt(2)))
    return np.exp(-0.5 * (across / width) ** 2) * width * np.sqrt(np.pi / 2) * span


def fitted_order(spacings: list[float], errors: list[float]) -> float:
    return float(np.polyfit(np.log(spacings), np.log(errors), 1)[0])


def test_integrals_of_a_blob_converge_at_second_order() -> None:
    """Outside source: error functions."""
    centre, width = np.array([4.3, -5.9]), 1.2
    errors, spacings = [], []
    for intervals in (20, 40, 80, 160):
        grid = square(intervals)
        starts, ends = random_rays(grid, 300)
        field = Blob(1.0, tuple(centre), (width, width)).values(nodes(grid))
        error = StraightRays(grid, starts, ends) @ field - blob_integrals(centre, width, starts, ends)
        errors.append(float(np.sqrt(np.mean(error**2))))
        spacings.append(grid.spacing[0])
    assert abs(fitted_order(spacings, errors) - 2.0) <= 0.1
    assert errors[-1] < 1e-3 * width


def test_integrals_of_a_disc_converge_to_its_chord_at_first_order() -> None:
    """Outside source: the chord 2 sqrt(r^2 - p^2).

    A nodal field misplaces the edge by a part of a cell, on average over rays; rays that graze the
    edge are worse, so that only the mean over many rays has the order.
    """
    centre, radius = np.array([4.3, -5.9]), 2.1
    errors, spacings = [], []
    for intervals in (40, 80, 160, 320):
        grid = square(intervals)
        angles = np.random.default_rng(2).uniform(0, np.pi, 2000)
        offsets = np.random.default_rng(3).uniform(-1.3 * radius, 1.3 * radius, 2000)
        along = np.column_stack([np.cos(angles), np.sin(angles)])
        middle = centre + offsets[:, None] * along[:, ::-1] * [-1, 1]
        field = Disc(1.0, tuple(centre), (radius, radius)).values(nodes(grid))
        found = StraightRays(grid, middle - 2.6 * along, middle + 2.6 * along) @ field
        chord = 2 * np.sqrt(np.maximum(radius**2 - offsets**2, 0))
        errors.append(float(np.mean(np.abs(found - chord))))
        spacings.append(grid.spacing[0])
    assert abs(fitted_order(spacings, errors) - 1.0) <= 0.1
    assert all(error < 0.5 * h for error, h in zip(errors, spacings, strict=True))


def test_shepp_logan_projections_are_those_of_scikit_image() -> None:
    """Outside source: `skimage.transform.radon` on the phantom of Shepp & Logan (1974).

    It turns the image about pixel n // 2 and adds up bilinear samples one pixel apart. Along the grid
    those are nodes, and the sum is the trapezoid rule, exact for our field as well; across it the
    sum is a quadrature with unit steps over a field with kinks at every grid line and jumps at the
    skull, good to about half a per cent of the largest projection, which is all that is asked for.
    """
    image = resize(shepp_logan_phantom(), (128, 128), anti_aliasing=True)
    middle = len(image) // 2
    image[np.hypot(*(np.indices(image.shape) - middle)) > middle - 1] = 0.0
    degrees = np.array([0.0, 90.0, 17.0, 45.0, 71.0, 128.0])
    expected = radon(image, degrees, circle=True)[1:]
    grid = Grid((0.0, 0.0), (1.0, 1.0), image.shape)
    offset = np.arange(1, len(image)) - middle
    for column, degree in enumerate(degrees):
        cosine, sine = np.cos(np.deg2rad(degree)), np.sin(np.deg2rad(degree))
        # (row, column) of a place at `offset` across and `s` along the projection.
        half = np.sqrt(np.maximum((middle - 1.0) ** 2 - offset**2, 0))
        nearest = np.column_stack([middle - offset * sine, middle + offset * cosine])
        reach = half[:, None] * np.array([cosine, sine])
        found = StraightRays(grid, nearest - reach, nearest + reach) @ image.reshape(-1)
        tolerance = 1e-9 if degree % 90 == 0 else 0.005
        assert np.abs(found - expected[:, column]).max() <= tolerance * expected.max()


def test_several_columns_equal_column_by_column() -> None:
    grid = Grid((0.0, -6.0), (0.3, 0.2), (14, 31))
    starts, ends = random_rays(grid, 40)
    operator = StraightRays(grid, starts, ends)
    rng = np.random.default_rng(5)
    for n_columns in (1, 2, 3, 7):
        fields = rng.normal(size=(grid.n_nodes, n_columns))
        data = rng.normal(size=(40, n_columns))
        singles = np.column_stack([operator.matvec(f) for f in fields.T])
        assert_allclose(operator.matmat(fields), singles, rtol=0, atol=1e-12 * np.abs(singles).max())
        singles = np.column_stack([operator.rmatvec(d) for d in data.T])
        assert_allclose(operator.rmatmat(data), singles, rtol=0, atol=1e-12 * np.abs(singles).max())


@pytest.fixture(scope="module")
def large() -> Rays:
    """Steep and flat rays, and in both families far more crossings than are worth threads."""
    grid = Grid((0.0, -30.0), (0.1, 0.1), (321, 301))
    starts, ends = random_rays(grid, 5000)
    steps = np.abs(ends - starts) / 0.1
    for family in (steps[:, 1] >= steps[:, 0], steps[:, 1] < steps[:, 0]):
        assert np.floor(steps[family].min(axis=1)).sum() > 100_000
    return grid, starts, ends


@pytest.mark.parametrize("n_columns", [1, 2])
def test_results_do_not_depend_on_the_number_of_threads_to_the_bit(large: Rays, n_columns: int) -> None:
    rng = np.random.default_rng(8)
    fields, data = rng.normal(size=(large[0].n_nodes, n_columns)), rng.normal(size=(5000, n_columns))
    one, two = (StraightRays(*large, threads=threads) for threads in (1, 2))
    assert_array_equal(one.matmat(fields), two.matmat(fields))
    assert_array_equal(one.rmatmat(data), two.rmatmat(data))


def test_a_large_survey_is_the_sum_of_its_parts(large: Rays) -> None:
    """Parts too small to be cut into blocks."""
    grid, starts, ends = large
    rng = np.random.default_rng(8)
    field, data = rng.normal(size=grid.n_nodes), rng.normal(size=5000)
    parts = [slice(first, first + 250) for first in range(0, 5000, 250)]
    operators = [StraightRays(grid, starts[part], ends[part]) for part in parts]
    whole = StraightRays(grid, starts, ends)
    forward = np.concatenate([operator @ field for operator in operators])
    assert_allclose(
        whole @ field, forward, rtol=0, atol=1e-12 * np.abs(field).max() * np.hypot(*grid.lengths)
    )
    adjoint = np.sum(
        [operator.T @ data[part] for operator, part in zip(operators, parts, strict=True)], axis=0
    )
    assert_allclose(whole.T @ data, adjoint, rtol=0, atol=1e-12 * np.abs(adjoint).max())


def test_lengths_scale_rows() -> None:
    grid = Grid((0.0, -6.0), (0.3, 0.2), (14, 31))
    starts, ends = random_rays(grid, 20)
    lengths = np.linalg.norm(ends - starts, axis=1)
    longer = lengths * np.linspace(1, 3, 20)
    plain = StraightRays(grid, starts, ends).matmat(np.eye(grid.n_nodes))
    scaled = StraightRays(grid, starts, ends, longer).matmat(np.eye(grid.n_nodes))
    assert_allclose(scaled, plain * np.linspace(1, 3, 20)[:, None], rtol=0, atol=1e-12 * longer.max())


@pytest.mark.parametrize("outside", [(-0.01, -1.0), (3.01, -1.0), (1.0, -4.01), (1.0, 0.01), (np.nan, -1.0)])
@pytest.mark.parametrize("reverse", [False, True])
def test_points_outside_the_grid_are_refused(outside: tuple[float, float], reverse: bool) -> None:
    grid = Grid((0.0, -4.0), (1.0, 0.5), (4, 9))
    inside = np.array([[0.0, 0.0], [1.0, -2.0]])
    beyond = np.array([[3.0, -4.0], outside])
    with pytest.raises(GridError, match=r"ray 1 .* leaves the grid"):
        StraightRays(grid, *((beyond, inside) if reverse else (inside, beyond)))


def test_points_on_the_edge_to_rounding_are_accepted() -> None:
    grid = Grid((0.1, -0.3), (0.1, 0.1), (4, 4))
    operator = StraightRays(grid, np.array([[0.1 + 3 * 0.1, -0.3]]), np.array([[0.4, 0.1 * 3 - 0.3]]))
    assert_allclose(operator @ np.ones(16), [0.3])


def test_grids_of_other_dimensions_are_refused() -> None:
    with pytest.raises(GridError, match="2 axes"):
        StraightRays(Grid((0.0,), (1.0,), (4,)), np.zeros((1, 1)), np.ones((1, 1)))


class TestOtherSolvers:
    """It is a `pylops.LinearOperator`: solvers of pylops and scipy take it as it is."""

    @pytest.fixture
    def problem(self) -> tuple[StraightRays, np.ndarray, np.ndarray]:
        grid = Grid((0.0, -3.0), (1.0, 0.5), (5, 7))
        operator = StraightRays(grid, *random_rays(grid, 300))
        model = np.random.default_rng(4).normal(size=grid.n_nodes)
        return operator, model, operator @ model

    def test_it_passes_the_dot_test(self, problem: tuple[StraightRays, np.ndarray, np.ndarray]) -> None:
        operator = problem[0]
        assert isinstance(operator, LinearOperator)
        assert dottest(operator, *operator.shape, rtol=1e-10)

    def test_they_solve(self, problem: tuple[StraightRays, np.ndarray, np.ndarray]) -> None:
        operator, model, data = problem
        zero = np.zeros_like(model)
        found = {
            "pylops cgls": pylops_cgls(operator, data, x0=zero, niter=400, tol=1e-26)[0],
            "pylops lsqr": pylops_lsqr(operator, data, x0=zero, niter=400, atol=0, btol=1e-13, conlim=0)[0],
            "scipy lsqr": lsqr(operator, data, atol=0, btol=1e-13, conlim=0, iter_lim=400)[0],
            "scipy lsmr": lsmr(operator, data, atol=0, btol=1e-13, conlim=0, maxiter=400)[0],
        }
        for name, solution in found.items():
            assert_allclose(solution, model, rtol=0, atol=1e-7, err_msg=name)


def test_rays_are_looked_at_by_offset_and_by_angle() -> None:
    columns = {"source_x": 0.0, "source_y": 0.0, "source_z": -24.0, "receiver_x": 18.0}
    columns |= {"receiver_y": 0.0, "receiver_z": 0.0, "time": 0.02, "time_error": 1e-4}
    survey = xr.Dataset({name: ("datum", [value]) for name, value in columns.items()})
    survey = survey.assign_coords(row=("datum", [1]))
    against = StraightRay().place(survey, StraightRaySettings()).against
    # 24 m up and 18 m across: by the 3-4-5 triangle 30 m and 53.13 degrees.
    assert against["offset (m)"] == pytest.approx(30.0)
    assert against["ray angle (degrees above level)"] == pytest.approx(53.1301, abs=1e-4)
