"""Laws of curved rays: second order where the ground is smooth, true derivatives, no way through air."""

from __future__ import annotations

import numpy as np
import pytest
import skfmm
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose, assert_array_equal
from pylops import Diagonal
from pylops.utils import dottest

from stillground.errors import GridError
from stillground.grid import Grid
from stillground.kernels.fast_marching import FAR
from stillground.operators.curved_rays import TravelTimes
from stillground.operators.marching import lay_out
from stillground.operators.straight_rays import StraightRays

V0, K = 800.0, 12.0


def gradient_slowness(grid: Grid) -> np.ndarray:
    """Of v = V0 + K depth, flattened."""
    return np.tile(1.0 / (V0 - K * grid.axes[1]), grid.shape[0])


def gradient_time(starts: np.ndarray, ends: np.ndarray) -> np.ndarray:
    """Slotnick (1959)."""
    v1, v2 = V0 - K * starts[:, 1], V0 - K * ends[:, 1]
    square = ((ends - starts) ** 2).sum(axis=1)
    return np.arccosh(1.0 + K**2 * square / (2.0 * v1 * v2)) / K


def deepest(starts: np.ndarray, ends: np.ndarray) -> np.ndarray:
    """Depth that the ray reaches: an arc about a centre V0 / K above elevation 0 (Slotnick 1959)."""
    (x1, z1), (x2, z2) = starts.T, ends.T
    y1, y2 = z1 - V0 / K, z2 - V0 / K
    centre = (x2**2 + y2**2 - x1**2 - y1**2) / (2 * (x2 - x1))
    turns = (centre - x1) * (centre - x2) < 0
    return np.where(turns, np.hypot(x1 - centre, y1) - V0 / K, -np.minimum(z1, z2))


def fan(source: tuple[float, float], receivers: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    return np.tile(source, (len(receivers), 1)), receivers


def spread(n_sources: int = 3, n_receivers: int = 9) -> tuple[np.ndarray, np.ndarray]:
    """Surface spread on hilly ground, off the nodes, every source to every receiver."""
    x, z = hills()
    sources, receivers = np.linspace(3.3, 36.2, n_sources), np.linspace(1.1, 38.7, n_receivers)
    here, there = (np.column_stack([at, np.interp(at, x, z)]) for at in (sources, receivers))
    return np.repeat(here, n_receivers, axis=0), np.tile(there, (n_sources, 1))


def hills() -> tuple[np.ndarray, np.ndarray]:
    x = np.linspace(0.0, 40.0, 21)
    return x, -1.2 + 1.1 * np.sin(x / 6.0)


def field_grid(intervals: int = 16) -> Grid:
    h = 16.0 / intervals
    return Grid((0.0, -16.0), (h, h), (round(40.0 / h) + 1, intervals + 1))


def lumpy(grid: Grid) -> np.ndarray:
    """Smooth ground, a gradient with lumps of some 15 %."""
    x, z = np.meshgrid(*grid.axes, indexing="ij")
    return (np.exp(0.15 * np.sin(x / 3.0) * np.cos(z / 2.5)) / (900.0 - 60.0 * z)).reshape(-1)


def wave(grid: Grid) -> np.ndarray:
    x, z = np.meshgrid(*grid.axes, indexing="ij")
    return np.sin(x / 4.0 + z / 3.0).reshape(-1)


def stepped(grid: Grid) -> np.ndarray:
    """A sharp refractor with a step of 2 m."""
    x, z = np.meshgrid(*grid.axes, indexing="ij")
    return np.where(z < -6.0 - 2.0 * (x > 18.0), 1 / 2400.0, 1 / 600.0).reshape(-1)


@pytest.mark.parametrize("wide", [1.0, 2.0], ids=["square cells", "flat cells"])
@pytest.mark.parametrize("source", [(30.37, -0.31), (61.2, -40.63)], ids=["near the surface", "in a hole"])
def test_gradient_medium_is_second_order(wide: float, source: tuple[float, float]) -> None:
    receivers = np.vstack(
        [
            np.column_stack([np.linspace(1.3, 198.7, 40), np.full(40, -0.17)]),
            np.column_stack([np.full(20, 173.31), np.linspace(-2.7, -97.3, 20)]),
            np.column_stack([np.linspace(5.9, 195.1, 20), np.full(20, -99.41)]),
        ]
    )
    starts, ends = fan(source, receivers)
    inside = (deepest(starts, ends) < 98.0) & (np.linalg.norm(ends - starts, axis=1) > 5.0)
    starts, ends = starts[inside], ends[inside]
    assert inside.sum() > 55
    exact = gradient_time(starts, ends)
    errors = []
    for intervals in (25, 50, 100, 200):
        h = 100.0 / intervals
        grid = Grid((0.0, -100.0), (wide * h, h), (round(200.0 / (wide * h)) + 1, intervals + 1))
        times = TravelTimes(grid, starts, ends).predict(gradient_slowness(grid))
        errors.append(np.abs(times / exact - 1).max())
    order = -np.polyfit(np.log2([25, 50, 100, 200]), np.log2(errors), 1)[0]
    assert order >= 1.8, errors
    assert errors[-1] <= 1e-4, errors


def test_a_tenth_of_the_error_of_a_general_eikonal_solver() -> None:
    """scikit-fmm, second order, on the same grid, given the exact front where it starts."""
    intervals, h = 100, 1.0
    grid = Grid((0.0, -100.0), (h, h), (201, intervals + 1))
    source = np.array([70.3, -30.4])
    x, z = np.meshgrid(*grid.axes, indexing="ij")
    slowness = gradient_slowness(grid)
    nodes = np.column_stack([x.reshape(-1), z.reshape(-1)])
    starts, ends = fan(tuple(source), nodes)
    exact = gradient_time(starts, ends)
    # In such a medium fronts are circles about points that sink (Slotnick 1959).
    v, early = V0 - K * source[1], 10.0 * h / (V0 - K * source[1])
    centre = source[1] - v / K * (np.cosh(K * early) - 1.0)
    front = np.hypot(x - source[0], z - centre) - v / K * np.sinh(K * early)
    theirs = np.asarray(skfmm.travel_time(front, 1.0 / slowness.reshape(grid.shape), dx=h, order=2))
    ours = TravelTimes(grid, starts, ends).predict(slowness)
    kept = (deepest(starts, ends) < 98.0) & (np.hypot(x - source[0], z - source[1]).reshape(-1) > 12.0)
    our_error, their_error = (
        np.abs(times / exact - 1)[kept].max() for times in (ours, theirs.reshape(-1) + early)
    )
    assert their_error >= 10.0 * our_error


def test_two_layers_have_direct_wave_refractor_intercept_and_crossover() -> None:
    """Telford, Geldart & Sheriff (1990): intercept 2 d cos(i) / v1, crossover 2 d sqrt((v2+v1)/(v2-v1))."""
    v1, v2, depth = 500.0, 2000.0, 5.0
    intercept = 2.0 * depth * np.sqrt(1.0 / v1**2 - 1.0 / v2**2)
    crossover = 2.0 * depth * np.sqrt((v2 + v1) / (v2 - v1))
    offsets = np.arange(1.0, 60.0, 0.5)
    starts, ends = fan((2.13, 0.0), np.column_stack([2.13 + offsets, np.zeros_like(offsets)]))
    near, far = offsets < 0.8 * crossover, offsets > 25.0
    late, late_crossing = [], []
    for h in (1.0, 0.5, 0.25):
        grid = Grid((0.0, -15.0), (h, h), (round(64.0 / h) + 1, round(15.0 / h) + 1))
        z = grid.axes[1]
        # Mean slowness of the ground within half a spacing of each node.
        share = np.clip((z + depth) / h + 0.5, 0.0, 1.0)
        slowness = np.tile(share / v1 + (1.0 - share) / v2, grid.shape[0])
        times = TravelTimes(grid, starts, ends).predict(slowness)
        assert_allclose(times[near], offsets[near] / v1, rtol=1e-12)
        slope, at_zero = np.polyfit(offsets[far], times[far], 1)
        assert slope == pytest.approx(1.0 / v2, rel=1e-3)
        late.append(at_zero - intercept)
        # To O(h), some 0.85 ms for each metre of spacing: the refractor begins a node below the interface,
        # and along it no front has a slope with depth, the worst case for differences across it.
        assert abs(late[-1]) <= 1e-3 * h
        late_crossing.append(at_zero / (1.0 / v1 - slope) - crossover)
    assert abs(late_crossing[-1]) <= 0.2
    assert max(abs(np.divide(late[1:], late[:-1]))) < 0.65
    assert max(abs(np.divide(late_crossing[1:], late_crossing[:-1]))) < 0.65


def shortest(start: np.ndarray, end: np.ndarray, surface: tuple[np.ndarray, np.ndarray]) -> float:
    """Length of the shortest path below a polygon: the lower convex hull of its corners and the two ends."""
    start, end = sorted((tuple(start), tuple(end)))
    x, z = surface
    between = (x > start[0]) & (x < end[0])
    hull: list[tuple[float, float]] = []
    for point in (start, *zip(x[between], z[between], strict=True), end):
        while len(hull) > 1:
            (x1, z1), (x2, z2) = hull[-2:]
            if (x2 - x1) * (point[1] - z1) > (z2 - z1) * (point[0] - x1):
                break
            hull.pop()
        hull.append(point)
    return float(np.linalg.norm(np.diff(hull, axis=0), axis=1).sum())


@pytest.mark.parametrize("shape", ["sharp", "round"])
def test_a_valley_is_gone_around_by_the_shortest_path(shape: str) -> None:
    """Shortest paths in a polygon turn at its corners only (common practice, no source)."""
    x = np.linspace(0.0, 80.0, 161)
    sharp, rounded = np.abs(x - 40.5) * 0.4 - 8.1, 5.1 * np.cos(np.pi * x / 40.0) - 4.0
    surface = (x, sharp if shape == "sharp" else rounded)
    across = np.linspace(1.7, 78.9, 25)
    along = np.column_stack([across, np.interp(across, *surface)])
    starts, ends = fan((12.6, float(np.interp(12.6, *surface))), np.vstack([along, along - [0.0, 7.3]]))
    far = np.linalg.norm(ends - starts, axis=1) > 4.0
    starts, ends = starts[far], ends[far]
    exact = np.array([shortest(*way, surface) for way in zip(starts, ends, strict=True)])
    straight = np.linalg.norm(ends - starts, axis=1)
    around = exact > 1.001 * straight
    assert 12 < around.sum() < 40
    # Largest error of paths around, mean error of them, largest of straight ones.
    goals = {1.0: (4.3e-3, 2e-3, 1e-3), 0.5: (2e-3, 8e-4, 4e-4), 0.25: (2.5e-3, 1.5e-3, 3e-4)}
    for h, (largest, mean, largest_straight) in goals.items():
        grid = Grid((0.0, -32.0), (h, h), (round(80.0 / h) + 1, round(42.0 / h) + 1))
        slowness = np.full(grid.n_nodes, 1 / 700.0)
        times = TravelTimes(grid, starts, ends, surface)
        found = 700.0 * times.predict(slowness)
        # The ground's edge is known to a cell, and so is the path.
        assert np.abs(found - exact).max() <= 0.4 * h
        apart = np.abs(found / exact - 1)
        assert apart[around].max() <= largest
        assert apart[around].mean() <= mean
        assert apart[~around].max() <= largest_straight
        # Traced rays follow the steps of the cells where fronts creep along the surface.
        rays = times.linearise(slowness)
        assert_allclose(rays @ slowness, found / 700.0, rtol=0.01)
        assert rays.replaced.mean() <= 0.25
        # Through the air it would be nearer.
        in_the_open = TravelTimes(grid, starts, ends).predict(slowness)
        assert_allclose(700.0 * in_the_open, straight, rtol=1e-9)


def test_second_order_under_hills_where_rays_stay_in_the_ground() -> None:
    """Slotnick (1959): rays are arcs about centres where the velocity would be nothing."""
    x = np.linspace(0.0, 120.0, 61)
    surface = x, -6.0 + 3.0 * np.sin(x / 9.0)
    v0, k = 600.0, 25.0
    at = np.linspace(2.3, 117.7, 40)
    starts, ends = fan(
        (30.4, float(np.interp(30.4, *surface))), np.column_stack([at, np.interp(at, *surface)])
    )
    (x1, y1), (x2, y2) = starts.T, (ends - [0.0, v0 / k]).T
    y1 = y1 - v0 / k
    centre = (x2**2 + y2**2 - x1**2 - y1**2) / (2 * (x2 - x1))
    way = x1 + np.linspace(0.01, 0.99, 199)[:, None] * (x2 - x1)
    depth = v0 / k - np.sqrt((x1 - centre) ** 2 + y1**2 - (way - centre) ** 2)
    kept = (depth < np.interp(way, *surface)).all(axis=0) & (depth.min(axis=0) > -58.0) & (abs(x2 - x1) > 4.0)
    assert kept.sum() > 25
    starts, ends = starts[kept], ends[kept]
    v1, v2 = v0 - k * starts[:, 1], v0 - k * ends[:, 1]
    exact = np.arccosh(1.0 + k**2 * ((ends - starts) ** 2).sum(axis=1) / (2.0 * v1 * v2)) / k
    errors, spacings = [], (2.0, 1.0, 0.5, 0.25)
    for h in spacings:
        grid = Grid((0.0, -60.0), (h, h), (round(120.0 / h) + 1, round(64.0 / h) + 1))
        slowness = np.tile(1.0 / (v0 - k * grid.axes[1]), grid.shape[0])
        times = TravelTimes(grid, starts, ends, surface).predict(slowness)
        errors.append(np.abs(times / exact - 1).mean())
    assert np.polyfit(np.log2(spacings), np.log2(errors), 1)[0] >= 1.8, errors
    assert errors[-1] <= 2e-5, errors


@pytest.mark.parametrize(("v1", "v2", "k"), [(500.0, 2000.0, 40.0), (800.0, 1600.0, 20.0)])
def test_a_refractor_that_grows_faster_with_depth_is_met_wherever_it_lies(
    v1: float, v2: float, k: float
) -> None:
    """A ray of parameter p: two straight pieces in the upper layer and an arc below (Slotnick 1959)."""
    h = 0.25
    grid = Grid((0.0, -20.0), (h, h), (273, 81))
    edges = grid.axes[1][:, None] + ((np.arange(64) + 0.5) / 64 - 0.5) * h
    for depth in 5.0 + h * np.arange(8) / 8:
        p = (1.0 - np.geomspace(1e-4, 0.3, 40)) / v2
        down = np.sqrt(1.0 - (p * v1) ** 2)
        offset = 2.0 * depth * p * v1 / down + 2.0 * np.sqrt(1.0 - (p * v2) ** 2) / (p * k)
        exact = 2.0 * depth / (v1 * down) + 2.0 / k * np.arccosh(1.0 / (p * v2))
        kept = (offset > 30.0) & (offset < 60.0) & (1.0 / p < v2 + k * (18.0 - depth))
        assert kept.sum() > 5
        starts, ends = fan((2.13, 0.0), np.column_stack([2.13 + offset[kept], np.zeros(kept.sum())]))
        # Mean slowness of the ground within half a spacing of each node.
        slowness = np.where(edges > -depth, 1.0 / v1, 1.0 / (v2 - k * (edges + depth))).mean(axis=1)
        times = TravelTimes(grid, starts, ends).predict(np.tile(slowness, grid.shape[0]))
        assert np.abs(times - exact[kept]).max() <= 1e-4


@pytest.mark.parametrize(
    ("depth", "surface", "faster"), [(2.7, None, 8), (0.0, hills(), 8)], ids=["below", "hills"]
)
def test_source_and_receiver_may_change_places(
    depth: float, surface: tuple[np.ndarray, np.ndarray] | None, faster: float
) -> None:
    starts, ends = spread(9, 9)
    pairs = np.arange(9) * 9 + np.roll(np.arange(9), 4)
    starts, ends = starts[pairs] - [0.0, depth], ends[pairs] - [0.0, depth]
    apart = []
    for intervals in (16, 32, 64):
        grid = field_grid(intervals)
        there, back = (
            TravelTimes(grid, *ways, surface).predict(lumpy(grid))
            for ways in ((starts, ends), (ends, starts))
        )
        apart.append(np.abs(there / back - 1).max())
    assert 0.0 < apart[-1] < 1e-3
    assert apart[2] < apart[0] / faster


def test_the_end_with_fewer_places_is_marched_from() -> None:
    grid = field_grid()
    starts, ends = spread(2, 5)
    there, back = (
        TravelTimes(grid, *ways, hills()).linearise(lumpy(grid)) for ways in ((starts, ends), (ends, starts))
    )
    assert_array_equal(there.times, back.times)
    assert_array_equal(there.todense(), back.todense())


def test_constant_velocity_gives_straight_rays() -> None:
    grid = Grid((-3.0, -8.0), (0.5, 0.4), (33, 21))
    rng = np.random.default_rng(3)
    starts, ends = np.array([-3.0, -8.0]) + rng.uniform(0, 1, (2, 60, 2)) * np.array([16.0, 8.0])
    starts[::7, 1] = ends[::7, 1]
    starts[1::7, 0] = ends[1::7, 0] = 2.0
    starts[2::7] = np.round(starts[2::7])
    straight = StraightRays(grid, starts, ends)
    slowness = np.full(grid.n_nodes, 1 / 1500.0)
    times = TravelTimes(grid, starts, ends)
    rays = times.linearise(slowness)
    assert_allclose(times.predict(slowness), straight @ slowness, rtol=1e-11)
    assert not rays.replaced.any()
    assert_allclose(rays.todense(), straight.todense(), atol=1e-11)


@settings(derandomize=True, deadline=None, max_examples=100)
@given(st.data())
def test_places_may_be_anywhere(data: st.DataObject) -> None:
    grid = Grid((0.0, -4.0), (1.0, 0.5), (7, 9))
    near_node = st.builds(
        lambda k, d: k + d, st.integers(0, 6).map(float), st.sampled_from([-1e-9, 0.0, 1e-9])
    )
    x = st.one_of(near_node, st.floats(0, 6)).map(lambda x: min(max(x, 0.0), 6.0))
    z = st.one_of(near_node, st.floats(0, 6)).map(lambda x: -4.0 + min(max(x, 0.0), 6.0) * 4.0 / 6.0)
    starts, ends = (np.array(data.draw(st.lists(st.tuples(x, z), min_size=3, max_size=3))) for _ in range(2))
    surface = (np.array([0.0, 6.0]), np.array([0.0, 0.0]))
    slowness = np.full(grid.n_nodes, 1 / 700.0)
    times = TravelTimes(grid, starts, ends, surface)
    exact = np.linalg.norm(ends - starts, axis=1) / 700.0
    assert_allclose(times.predict(slowness), exact, rtol=1e-10, atol=1e-15)
    rays = times.linearise(slowness)
    assert not rays.replaced.any()
    assert_allclose(rays @ slowness, exact, rtol=1e-10, atol=1e-15)


def test_derivative_is_that_of_the_times() -> None:
    grid = field_grid(32)
    times = TravelTimes(grid, *spread(), hills())
    slowness, step = lumpy(grid), 1e-5
    change = slowness * wave(grid)
    ahead, behind = (times.predict(slowness + sign * step * change) for sign in (1, -1))
    found = times.differentiate(slowness) @ change
    difference = np.abs((ahead - behind) / (2 * step) / found - 1)
    # Stencils switch, and the time with them; hence the median.
    assert np.median(difference) <= 1e-6
    log_slowness = times.differentiate(slowness) @ Diagonal(slowness)
    assert_allclose(log_slowness @ wave(grid), found, rtol=1e-12)


@pytest.mark.parametrize("ground", [lumpy, stepped])
def test_dense_matrices_are_each_other_s_transposes(ground: object) -> None:
    grid = field_grid()
    times = TravelTimes(grid, *spread(2, 5), hills())
    for operator in (times.differentiate(ground(grid)), times.linearise(ground(grid))):
        forward = operator @ np.eye(operator.shape[1])
        backward = operator.T @ np.eye(operator.shape[0])
        assert np.abs(forward - backward.T).max() <= 1e-12 * np.abs(forward).max()
        dottest(operator, rtol=1e-9)


@pytest.mark.parametrize("ground", [lumpy, stepped])
def test_rows_times_slowness_is_time(ground: object) -> None:
    """Euler's theorem for functions homogeneous of degree one."""
    grid = field_grid(32)
    times = TravelTimes(grid, *spread(), hills())
    slowness = ground(grid)
    exact, rays = times.differentiate(slowness), times.linearise(slowness)
    assert_array_equal(exact.times, times.predict(slowness))
    assert_array_equal(rays.times, exact.times)
    assert_allclose(exact @ slowness, exact.times, rtol=1e-9)
    assert_allclose(rays @ slowness, exact.times, rtol=0.01)


def test_traced_rays_are_near_the_exact_derivative_and_nearer_on_finer_grids() -> None:
    apart = []
    for intervals in (32, 128):
        grid = field_grid(intervals)
        times = TravelTimes(grid, *spread(), hills())
        slowness = lumpy(grid)
        change = slowness * wave(grid)
        exact, rays = times.differentiate(slowness) @ change, times.linearise(slowness)
        assert rays.replaced.mean() < 0.1
        apart.append(np.linalg.norm(rays @ change - exact) / np.linalg.norm(exact))
    assert apart[0] < 0.1
    assert apart[1] < 0.5 * apart[0]


def test_rays_gone_astray_give_way_to_the_exact_row() -> None:
    grid = field_grid(32)
    rough = lumpy(grid) * np.exp(np.random.default_rng(0).normal(0, 0.5, grid.n_nodes))
    times = TravelTimes(grid, *spread(), hills())
    rays, exact = times.linearise(rough), times.differentiate(rough)
    assert 0 < rays.replaced.sum() < rays.replaced.size
    index = np.flatnonzero(rays.replaced)
    ours, theirs = rays.rows(index).todense(), exact.rows(index).todense()
    assert_allclose(ours, theirs, atol=1e-8 * np.abs(theirs).max())
    # What is within the error of the datum is near enough.
    lenient = times.linearise(rough, errors=np.full(times.n_data, 1.0))
    assert lenient.replaced.sum() < rays.replaced.sum()


def test_results_do_not_depend_on_threads() -> None:
    grid = field_grid(32)
    data, fields = np.random.default_rng(5).normal(size=(2, 27, 3)), wave(grid)[:, None] * np.arange(1, 4)
    results = []
    for threads in (1, 2):
        times = TravelTimes(grid, *spread(), hills(), threads=threads)
        operators = times.differentiate(lumpy(grid)), times.linearise(lumpy(grid))
        products = [(o.matmat(fields), o.rmatmat(data[0])) for o in operators]
        results.append([times.predict(lumpy(grid)), *(each for pair in products for each in pair)])
    for one, two in zip(*results, strict=True):
        assert_array_equal(one, two)


def test_columns_and_rows_can_be_taken_apart() -> None:
    grid = field_grid()
    times = TravelTimes(grid, *spread(2, 5), hills())
    rng = np.random.default_rng(2)
    fields, index = rng.normal(size=(grid.n_nodes, 6)), np.array([7, 0, 7, 4])
    for operator in (times.differentiate(lumpy(grid)), times.linearise(lumpy(grid))):
        together = operator @ fields
        for column, field in zip(together.T, fields.T, strict=True):
            assert_allclose(operator @ field, column, rtol=1e-9)
        some = operator.rows(index)
        assert_allclose(some @ fields, together[index], rtol=1e-12)
        y = rng.normal(size=4)
        assert_allclose(some.T @ y, np.einsum("i,ij->j", y, operator.todense()[index]), atol=1e-12)
        assert_array_equal(some.times, operator.times[index])


def test_a_surface_along_the_highest_nodes_changes_nothing() -> None:
    grid = Grid((0.0, -6.0), (0.5, 0.5), (21, 13))
    starts, ends = fan((1.3, 0.0), np.array([[9.1, 0.0], [6.0, -3.2]]))
    flat = (np.array([2.0, 5.0]), np.zeros(2))
    slowness = np.exp(0.1 * np.random.default_rng(1).normal(size=grid.n_nodes)) / 800.0
    assert_array_equal(
        TravelTimes(grid, starts, ends, flat).predict(slowness),
        TravelTimes(grid, starts, ends).predict(slowness),
    )


def test_air_above_the_surface_changes_nothing() -> None:
    cut, tall = (Grid((0.0, -6.0), (0.5, 0.5), (21, rows)) for rows in (13, 17))
    starts, ends = fan((1.5, 0.0), np.array([[9.0, 0.0], [8.9, 0.0], [6.0, -3.2]]))
    slowness = 1.0 / (700.0 - 50.0 * np.minimum(tall.axes[1], 0.0)) * np.ones((21, 1))
    slowness[:, 13:] = 1e-6
    level = (np.array([0.0, 10.0]), np.zeros(2))
    below = TravelTimes(cut, starts, ends).linearise(slowness[:, :13])
    beside = TravelTimes(tall, starts, ends, level).linearise(slowness)
    assert_array_equal(beside.times, below.times)
    dense = beside.todense().reshape(3, *tall.shape)
    assert_array_equal(dense[..., :13].reshape(3, -1), below.todense())
    assert not dense[..., 13:].any()
    # Nor do times hang on what was left in memory for nodes in the air.
    layout = lay_out(tall, starts, ends, level)
    assert (layout.closed[layout.nodes] == FAR).all()


@pytest.mark.parametrize("seed", range(12))
def test_no_arrival_outruns_the_fastest_ground(seed: int) -> None:
    """Fermat; in ground that is white noise, on cells up to four times as wide as high or as high as wide."""
    rng = np.random.default_rng(seed)
    grid = Grid(
        (0.0, 0.0), (1.0, (0.25, 1.0, 4.0)[seed % 3]), ((42, 42, 5)[seed % 3], (10, 30, 40)[seed % 3])
    )
    ends = rng.uniform(0.0, 1.0, (60, 2)) * grid.lengths
    starts = np.tile(rng.uniform(0.0, 1.0, (4, 2)) * grid.lengths, (15, 1))
    starts[::4, 1], starts[1::4, 0] = grid.lengths[1], 0.0
    slowness = np.exp(rng.normal(0.0, 0.1, grid.n_nodes)) / 1000.0
    length = np.linalg.norm(ends - starts, axis=1)
    assert (TravelTimes(grid, starts, ends).predict(slowness) >= 0.97 * length * slowness.min()).all()


def test_places_without_ground_are_refused() -> None:
    grid = Grid((0.0, -4.0), (0.5, 0.5), (21, 9))
    good, surface = np.array([[1.0, -2.0]]), (np.array([0.0, 10.0]), np.array([-1.0, -1.0]))
    with pytest.raises(GridError, match=r"ray 0 ends outside the grid, at \(11.0, -2.0\) m"):
        TravelTimes(grid, good, np.array([[11.0, -2.0]]))
    with pytest.raises(GridError, match=r"ray 0 starts above the surface, at \(3.0, -0.5\) m"):
        TravelTimes(grid, np.array([[3.0, -0.5]]), good, surface)
    with pytest.raises(GridError, match="not above the lowest nodes"):
        TravelTimes(grid, good, good, (np.array([0.0, 5.0, 10.0]), np.array([0.0, -5.0, 0.0])))
    with pytest.raises(GridError, match="grid of 2 axes; got 1"):
        TravelTimes(Grid((0.0,), (1.0,), (3,)), good, good)
    with pytest.raises(ValueError, match="positive and finite; the smallest is -1 s/m"):
        TravelTimes(grid, good, good).predict(np.linspace(-1, 1, grid.n_nodes))
