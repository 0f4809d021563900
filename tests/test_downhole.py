"""Times down a borehole: exact integrals, the differences of practice, the ladder, and honest error bars."""

from __future__ import annotations

from collections.abc import Sequence
from functools import cache
from pathlib import Path

import numpy as np
import pytest
import xarray as xr
from scipy.interpolate import make_interp_spline

from stillground.config import Config, load
from stillground.errors import GridError, SurveyError
from stillground.grid import Grid, ladder
from stillground.ground import Ground, Layer
from stillground.operators.interval_integrals import IntervalIntegrals
from stillground.physics.downhole import Downhole, DownholeSettings, HoleScene
from stillground.pipeline.answer import plan_method, rehearse_profile, repeated_rung
from stillground.pipeline.grids import plan_grids
from stillground.pipeline.linear import linear_ladder
from stillground.pipeline.profiles import read_profiles
from stillground.pipeline.simulate import described_ground
from stillground.progress import finish
from stillground.protocols import Array, Rehearsal
from stillground.reconstruct import judge, prepare, reconstruct
from stillground.refinement import climb
from stillground.solve import back, iterate
from stillground.uncertainty import noise_part

DEMO = Path(__file__).parents[1] / "configs" / "osmere-weir-downhole.toml"
VELOCITIES = (800.0, 1500.0, 2500.0)
LAYERS = Ground(
    1 / VELOCITIES[0],
    (Layer(1 / 1500 - 1 / 800, bottom=-12.0, top=-5.0), Layer(1 / 2500 - 1 / 800, bottom=-1e9, top=-12.0)),
)


def hole(
    receivers: Sequence[float],
    sources: Sequence[tuple[float, float]] = ((3.0, 0.0),),
    ground: Ground = LAYERS,
    depth: float = 30.0,
) -> HoleScene:
    """Exact times from sources (offset, elevation) to receivers (elevation) at 0, 0."""
    pairs = [(x, z, r) for x, z in sources for r in receivers]
    x, z, r = (np.array(column) for column in zip(*pairs, strict=True))
    zeros = np.zeros_like(r)
    columns = {
        "source_x": x, "source_y": zeros, "source_z": z,
        "receiver_x": zeros, "receiver_y": zeros, "receiver_z": r, "time_error": zeros + 5e-5,
    }  # fmt: skip
    survey = xr.Dataset(
        {name: ("datum", values) for name, values in columns.items()},
        coords={"row": ("datum", np.arange(2, 2 + r.size))},
        attrs={"source": "hole.csv"},
    )
    settings = DownholeSettings(average_depth=f"{depth} m")  # type: ignore[arg-type]
    times = Downhole().place(survey, settings).predict(ground)
    return Downhole().place(survey.assign(time=("datum", times)), settings)


def test_integrals_are_those_of_the_linear_interpolant_and_the_adjoint_is_the_transpose() -> None:
    # scipy's spline of degree 1 is the function between the nodes; its integral is exact.
    random = np.random.default_rng(0)
    grid = Grid((-7.0,), (0.5,), (15,))
    starts, ends = random.uniform(-7, 0, (2, 40))
    starts[:4], ends[:4] = (-7.0, -6.5, 0.0, -3.2), (0.0, -6.0, -7.0, -3.1)
    factors = random.uniform(1, 3, 40)
    A = IntervalIntegrals(grid, starts, ends, factors)
    field = random.standard_normal((grid.n_nodes, 3))
    spline = make_interp_spline(grid.axes[0], field, k=1)
    exact = [f * np.abs(spline.integrate(a, b)) * np.sign(spline.integrate(min(a, b), max(a, b)))
             for f, a, b in zip(factors, starts, ends, strict=True)]  # fmt: skip
    np.testing.assert_allclose(A.matmat(field), exact, atol=1e-13)
    forward, adjoint = A.matmat(np.eye(grid.n_nodes)), A.rmatmat(np.eye(40))
    assert np.abs(forward - adjoint.T).max() < 1e-12
    index = np.array([7, 3])
    np.testing.assert_array_equal(A.rows(index).matmat(field), A.matmat(field)[index])
    with pytest.raises(GridError, match=r"interval 1 from -3\.0 to 0\.5 leaves the grid"):
        IntervalIntegrals(grid, np.array([-1.0, -3.0]), np.array([-2.0, 0.5]))
    with pytest.raises(GridError, match="1 axis; got 2"):
        IntervalIntegrals(Grid((0.0, 0.0), (1.0, 1.0), (3, 3)), starts, ends)


def test_times_of_a_velocity_gradient_come_at_second_order() -> None:
    # Straight down through v = v0 + k d the time is ln(v2 / v1) / k (Slotnick 1959, at offset 0).
    v0, k = 600.0, 40.0
    errors = []
    for spacing in (1.0, 0.5, 0.25):
        grid = Grid((-40.0,), (spacing,), (round(40 / spacing) + 1,))
        A = IntervalIntegrals(grid, np.array([0.0]), np.array([-33.3]))
        errors.append(float((A @ (1 / (v0 - k * grid.axes[0])))[0] - np.log1p(k * 33.3 / v0) / k))
    assert errors[0] / errors[1] == pytest.approx(4, abs=0.2)
    assert errors[1] / errors[2] == pytest.approx(4, abs=0.2)


def test_times_of_layers_are_thickness_over_velocity_times_the_slant() -> None:
    scene = hole([-2.0, -8.0, -20.0], [(3.0, 0.0)])
    down = [2 / 800, 5 / 800 + 3 / 1500, 5 / 800 + 7 / 1500 + 8 / 2500]
    slant = [np.hypot(3, d) / d for d in (2.0, 8.0, 20.0)]
    np.testing.assert_allclose(scene.data, np.array(down) * slant, rtol=1e-13)


def test_first_differences_of_exact_times_are_the_interval_velocities() -> None:
    # Interval velocity: thickness over the difference of vertical times (common practice; ASTM D7400).
    # Two sources at one elevation and a repeated row agree once they are reduced to the vertical.
    scene = hole([-1.0, -3.0, -5.0, -8.5, -12.0, -20.0, -20.0], [(3.0, 0.0), (-6.0, 0.0)])
    found = scene.differences
    assert found is not None
    np.testing.assert_array_equal(found.lower, [-20, -12, -8.5, -5, -3])
    np.testing.assert_array_equal(found.upper, [-12, -8.5, -5, -3, -1])
    np.testing.assert_allclose(1 / found.values, [2500, 1500, 1500, 800, 800], rtol=1e-12)


def test_an_uphole_shot_is_a_downhole_one_turned_round() -> None:
    down = hole([-4.0, -9.0])
    up = hole([0.0], [(3.0, -4.0), (3.0, -9.0)])
    np.testing.assert_allclose(up.data, down.data, rtol=1e-14)
    assert up.upper == down.upper == (0.0,)
    assert up.trace(np.zeros(1)) == (3.0, 0.0), "the hole is where the lower ends are"


def test_level_paths_are_refused_with_their_rows() -> None:
    with pytest.raises(SurveyError, match=r"hole\.csv.*one level in row 3, 5"):
        hole([-4.0, -0.0004, -9.0, 0.0])


@pytest.mark.parametrize(("offset", "doubted"), [(2.9, 0), (3.1, 1), (7.0, 3)])
def test_paths_with_offsets_beyond_depths_are_doubted(offset: float, doubted: int) -> None:
    scene = hole([-3.0, -5.0, -6.5, -20.0], [(offset, 0.0)])
    said = [doubt for doubt in scene.doubts if "hardly straight" in doubt]
    assert bool(said) == bool(doubted)
    assert not said or said[0].startswith(f"{doubted} of 4 paths run more than 45 degrees off the vertical")


def test_differences_without_a_velocity_and_a_second_hole_are_doubted() -> None:
    scene = hole([-4.0, -9.0, -14.0])
    assert scene.doubts == ()
    columns = ("source_x", "source_y", "source_z", "receiver_x", "receiver_y", "receiver_z")
    table = {name: ("datum", np.zeros(3)) for name in columns}
    table["receiver_z"] = ("datum", np.array([-4.0, -9.0, -14.0]))
    table["receiver_x"] = ("datum", np.array([0.0, 0.0, 4.0]))
    table["time"] = ("datum", np.array([0.004, 0.010, 0.009]))
    odd = Downhole().place(xr.Dataset(table, coords={"row": ("datum", np.arange(3))}), DownholeSettings())
    assert any("1 of 2 first differences of the times are not above zero" in doubt for doubt in odd.doubts)
    assert any("up to 4 m apart in plan" in doubt for doubt in odd.doubts)


def test_coverage_holds_the_length_of_all_paths_whatever_the_grid() -> None:
    scene = hole(-np.arange(2.0, 21.0))
    for spacing in (0.5, 0.125):
        (grid,) = ladder((-24.0,), (4.0,), (spacing,), 1)
        found = scene.coverage(grid, (2.0,))
        assert grid.weights() @ found.values == pytest.approx(np.sum(np.hypot(3, np.arange(2.0, 21.0))))


@pytest.mark.parametrize(
    ("asked", "over", "exact"),
    [
        (10.0, "down to 10 m", (5 / 800 + 5 / 1500) / 10),
        (30.0, "down to 20 m, the deepest position", (5 / 800 + 7 / 1500 + 8 / 2500) / 20),
    ],
)
def test_the_average_is_depth_over_the_vertical_time(asked: float, over: str, exact: float) -> None:
    # Depth over the sum of thickness over velocity, as building codes average shear waves (from memory).
    scene = hole(-np.arange(1.0, 21.0), depth=asked)
    (grid,) = ladder((-21.0,), (1.0,), (1 / 64,), 1)
    ((name, weights),) = scene.averages(grid).items()
    assert name == over
    assert weights.sum() == pytest.approx(1, abs=1e-12)
    assert weights @ LAYERS.values(grid.axes[0][:, None]) == pytest.approx(exact, rel=1e-3)
    assert any("reaches 20 m only" in fact for fact in scene.facts) == (asked > 20)


def settings(*overrides: str) -> Config:
    return load(DEMO, overrides)[0]


@pytest.mark.parametrize(("smoothness", "ratio"), [(2.0, 4.0), (0.0, np.sqrt(2))])
def test_the_ladder_shrinks_at_order_two_and_without_a_prior_at_one_half(
    smoothness: float, ratio: float
) -> None:
    # Second order of hat functions; a white prior has a staircase for its limit, which they meet at h^(1/2).
    config = settings(f"ground.smoothness={smoothness}", "refinement.levels=6", "ground.spacing='0.03125 m'")
    (profile,) = read_profiles(config)
    grids, method = plan_grids(profile, config), plan_method(config)
    top = finish(climb(profile.scene.assemble, grids, method, 0.02, config.kind.regularity))
    change = np.array(top.ladder.change)
    found = change[-3:-1] / change[-2:]
    np.testing.assert_allclose(found, ratio, rtol=0.03 if smoothness else 0.1)
    assert top.ladder.verdict.word != "drifting"
    if smoothness:
        assert top.ladder.verdict.word == "settled"


def one_rule() -> Config:
    """The demo with no rule but the chosen one, which is all that its errors hang on."""
    return settings("stopping.rules=['discrepancy']")


@cache
def ensemble(draws: int = 50) -> tuple[Array, Array, Array, Rehearsal, Array]:
    """Elevations, true slowness, answers to draws of the demo's noise, its rehearsal, noisy times."""
    config = one_rule()
    (profile,) = read_profiles(config)
    grids, method = plan_grids(profile, config), plan_method(config)
    scene, grid = profile.scene, grids[repeated_rung(grids)]
    assert isinstance(scene, HoleScene)
    assert config.simulate is not None
    ground = described_ground(config.simulate, config.kind.axes)
    measurement = scene.assemble(grid)
    noise = scene.errors[:, None] * np.random.default_rng(5).standard_normal((scene.data.size, draws))
    noisy = scene.predict(ground)[:, None] + noise
    problem = prepare(measurement, grid, method, products=10**6)
    background = problem.standard.background
    columns = (noisy - measurement.operator.matvec(background)[:, None]) / scene.errors[:, None]
    runs = finish(iterate(method.solver, problem.operator, columns, method.iterations, probes=0))
    stops = [judge(run.history, method)[0][method.choose].iteration for run in runs]
    chosen = [run.inside(run.history.last if stop is None else stop)
              for run, stop in zip(runs, stops, strict=True)]  # fmt: skip
    answers = background[:, None] + problem.anomaly(back(problem.operator, np.column_stack(chosen)))
    linear = finish(linear_ladder(profile, config, grids, plan_method(config)))
    rehearsal = finish(rehearse_profile(profile, config, grids, linear, 1.0))
    elevation = grid.axes[0]
    return elevation, ground.values(elevation[:, None]), answers, rehearsal, noisy / scene.factors[:, None]


def within(elevation: Array) -> Array:
    """Where every window of the differences has its middle."""
    return (elevation >= 154) & (elevation <= 205)


def window_errors(elevation: Array, truth: Array, vertical: Array) -> list[float]:
    """Root mean square errors of velocities by differences over windows of 1 to 8 m, at their middles."""
    level = 209.0 - np.arange(60)
    errors = []
    for window in range(1, 9):
        middle = 0.5 * (level[window:] + level[:-window])
        velocity = window / (vertical[window:] - vertical[:-window])
        true = 1 / np.interp(middle, elevation, truth)
        errors.append(float(np.sqrt(np.mean((velocity - true[:, None])[within(middle)] ** 2))))
    return errors


def test_the_answer_errs_less_than_differences_over_the_best_window() -> None:
    elevation, truth, answers, _, vertical = ensemble()
    inside = within(elevation)
    error = np.sqrt(np.mean((1 / answers - 1 / truth[:, None])[inside] ** 2))
    errors = window_errors(elevation, truth, vertical)
    assert errors[0] > 4 * error, "first differences are what noise makes of them"
    assert error <= min(errors)


def test_bars_of_the_total_error_hold_what_they_promise() -> None:
    # A normal error lies within one deviation in 68 % and within two in 95 % of cases; bars may be wary.
    elevation, truth, answers, rehearsal, _ = ensemble()
    inside = within(elevation)
    missed = np.abs(answers - truth[:, None])[inside] / rehearsal.total_error[inside][:, None]
    assert 0.75 <= np.mean(missed < 1) <= 0.9
    assert np.mean(missed < 2) >= 0.95


def test_the_noise_part_of_the_average_is_its_scatter_at_one_stop() -> None:
    # 300 whole surveys drawn anew: a Monte Carlo of the definition.
    config = one_rule()
    (profile,) = read_profiles(config)
    grids, method = plan_grids(profile, config), plan_method(config)
    grid = grids[repeated_rung(grids)]
    measurement, (weights,) = profile.scene.assemble(grid), profile.scene.averages(grid).values()
    answer = finish(reconstruct(measurement, grid, method))
    stop = answer.stop(method.choose)
    _, told = finish(noise_part(answer, stop, members=64, seed=3, averages={"mean": weights}))
    problem = prepare(measurement, grid, method, products=10**6)
    noise = answer.noise * np.random.default_rng(2).standard_normal((measurement.data.size, 300))
    columns = problem.standard.b[:, None] + 0.2 * noise
    runs = finish(iterate(method.solver, problem.operator, columns, int(stop) + 1, probes=0))
    grounds = problem.anomaly(back(problem.operator, np.column_stack([run.inside(stop) for run in runs])))
    assert told["mean"] == pytest.approx(np.std(weights @ grounds) / 0.2, rel=0.2)


def test_the_total_error_of_the_average_is_about_what_it_misses() -> None:
    elevation, truth, answers, rehearsal, _ = ensemble()
    (profile,) = read_profiles(one_rule())
    grid = Grid((elevation[0],), (elevation[1] - elevation[0],), (elevation.size,))
    ((over, weights),) = profile.scene.averages(grid).items()
    missed = np.sqrt(np.mean((weights @ (answers - truth[:, None])) ** 2))
    assert 0.4 < missed / rehearsal.average_errors[over] < 1.5
