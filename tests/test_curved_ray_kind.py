"""First arrivals along bent rays as a kind: its start, its surface, its derivative, what it refuses."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import xarray as xr
from numpy.testing import assert_allclose
from tests.refraction_line import SHOTS, V0, K, dome, line, slotnick

from stillground.errors import ConfigError, SurveyError
from stillground.grid import Grid
from stillground.ground import Blob, Box, Ground
from stillground.operators.curved_rays import TravelTimes
from stillground.physics.curved_ray import CurvedRay, CurvedRayScene, CurvedRaySettings
from stillground.physics.reciprocity import reciprocity
from stillground.physics.start_velocity import arrivals, fitted_velocity
from stillground.products.rays import ray_variables, rays_of
from stillground.protocols import Array


def placed(survey: xr.Dataset, folder: Path = Path(), **settings: Any) -> CurvedRayScene:
    given = CurvedRaySettings.model_validate(settings, context={"folder": folder})
    return CurvedRay().place(survey, given)


def grid(scene: CurvedRayScene, spacing: float = 1.0) -> Grid:
    high = float(np.ceil(scene.upper[1]))
    return Grid((-2.0, high - 20.0), (spacing, spacing), (round(52 / spacing) + 1, round(20 / spacing) + 1))


def test_times_of_a_gradient_medium_give_back_its_velocities() -> None:
    start = placed(line()).start
    depths = np.linspace(0.0, 15.0, 7)
    assert_allclose(start.velocity(depths), V0 + K * depths, rtol=5e-3)
    # The deepest wave of an offset X turns at the velocity sqrt(V0^2 + (K X / 2)^2) (Slotnick 1959).
    assert start.velocity(np.array([100.0]))[0] <= np.hypot(V0, K * 47 / 2) * 1.01


def test_a_few_wild_times_hardly_move_the_start() -> None:
    def wild(starts: Array, ends: Array) -> Array:
        times = slotnick(starts, ends)
        times[::10] *= 5.0
        return times

    depths = np.linspace(0.0, 10.0, 5)
    assert_allclose(placed(line(times=wild)).start.velocity(depths), V0 + K * depths, rtol=0.1)


def test_a_start_that_hardly_fits_says_so_in_whole_percent() -> None:
    """Times off by a factor exp(4.2) up and down are off by 420 % in the logarithm."""
    lengths = np.linspace(1.0, 50.0, 50)
    off = np.exp(np.where(np.arange(50) % 2, 4.2, -4.2))
    start = fitted_velocity(lengths / 1000 * off, lengths, (np.zeros(50), np.zeros(50)))
    assert start.fact.endswith("which it gives to 420 %")


def test_waves_of_the_start_take_the_times_of_a_march_through_it() -> None:
    """Closed forms against the operator's own fast marching, which knows nothing of them."""
    starts = np.tile([0.0, -1.0], (12, 1))
    ends = np.column_stack([np.linspace(3.0, 58.0, 12), np.zeros(12)])
    fine = Grid((-2.0, -20.0), (0.125, 0.125), (497, 161))
    velocity = np.minimum(V0 - K * fine.axes[1], 1200.0)
    times = TravelTimes(fine, starts, ends).predict(np.tile(1 / velocity, fine.shape[0]))
    lengths = np.linalg.norm(ends - starts, axis=1)
    told = arrivals(lengths, (-starts[:, 1], -ends[:, 1]), V0, K, 1200.0)
    assert_allclose(told, times, rtol=2e-3)
    # The farthest, 5 m apart, run along where velocity ends to grow.
    assert_allclose(np.diff(told[-4:]), 5 / 1200, rtol=1e-3)


def test_uniform_ground_gives_straight_times_whatever_the_places() -> None:
    # To a fiftieth of what picks can be read to: at the surface cells are partly air.
    survey = line(relief=dome, source_y=np.full(120, 0.8))
    scene = placed(survey)
    starts, ends = (
        np.column_stack([survey[f"{end}_{axis}"] for axis in "xyz"]) for end in ("source", "receiver")
    )
    straight = np.linalg.norm(ends - starts, axis=1) / 1250.0
    assert_allclose(scene.predict(Ground(1 / 1250.0)), straight, rtol=1e-4, atol=5e-6)


def test_described_ground_must_have_a_positive_slowness() -> None:
    fast = Ground(1e-3, (Blob(-2e-3, (20.0, -5.0), (5.0, 5.0)),))
    with pytest.raises(ConfigError, match="bodies add up to a slowness of -"):
        placed(line()).predict(fast)


def test_head_waves_of_the_described_ground_have_the_intercept_of_theory() -> None:
    """Two layers: t = x / v2 + 2 h sqrt(1 / v1^2 - 1 / v2^2) (Telford, Geldart & Sheriff 1990)."""
    below = Box(1 / 2000 - 1 / 500, (-1e4, -1e4), (1e4, -5.0))
    scene = placed(line())
    offset = np.abs(scene.ends[:, 0] - scene.starts[:, 0])
    far = offset > 25.0
    theory = offset / 2000 + 10 * np.sqrt(1 / 500**2 - 1 / 2000**2)
    assert_allclose(scene.predict(Ground(1 / 500, (below,)))[far], theory[far], atol=2e-4)


def test_the_derivative_is_that_of_the_times_by_log_slowness() -> None:
    scene = placed(line(relief=dome))
    here = grid(scene, 0.5)
    measurement = scene.assemble(here)
    u = measurement.start
    times, derivative = measurement.linearise(u)
    assert_allclose(times, measurement.predict(u), rtol=1e-12)
    # Slower by one part everywhere: every time grows by that part.
    assert_allclose(derivative @ np.ones(u.size), times, rtol=0.01)
    x, z = np.meshgrid(*here.axes, indexing="ij")
    change = (np.sin(x / 5.0) * np.cos(z / 4.0)).reshape(-1)
    central = (measurement.predict(u + 1e-4 * change) - measurement.predict(u - 1e-4 * change)) / 2e-4
    misfit = np.abs(derivative @ change - central)
    assert np.median(misfit) < 0.02 * np.sqrt(np.mean(central**2))
    part = np.array([7, 3])
    assert_allclose(derivative.rows(part) @ change, (derivative @ change)[part])


def test_air_has_no_part_in_any_time() -> None:
    """Across a valley of uniform ground: through the air the way would be straight."""
    scene = placed(line(relief=lambda x: 0.01 * (x - 24.0) ** 2), start="500 m/s")
    here = replace(grid(scene), shape=(53, 25))
    _, derivative = scene.assemble(here).linearise(scene.assemble(here).start)
    weight = np.abs(derivative.rmatvec(np.ones(len(scene.data)))).reshape(here.shape)
    air = here.axes[1] > np.interp(here.axes[0], *scene.ground_surface)[:, None] + 1.5
    assert air.any()
    assert not weight[air].any()


@pytest.mark.parametrize("shots", [SHOTS, np.arange(0.0, 49.0, 1.5)], ids=["few", "many"])
def test_rays_lead_from_source_to_receiver_below_the_surface(shots: Array) -> None:
    """With more shots than receivers the march begins at receivers, and rays must be turned round."""
    scene = placed(line(shots=shots, relief=dome))
    measurement = scene.assemble(grid(scene))
    rays = measurement.rays(measurement.start)
    assert len(rays) == len(scene.data)
    for ray, start, end in zip(rays, scene.starts, scene.ends, strict=True):
        assert_allclose(ray[[0, -1]], [start, end], atol=1e-9)
    # A long one dives.
    longest = int(np.argmax(np.abs(scene.ends[:, 0] - scene.starts[:, 0])))
    assert rays[longest][:, 1].min() < min(scene.starts[longest, 1], scene.ends[longest, 1]) - 3.0


def test_coverage_is_that_of_the_rays_given_and_holds_all_their_length() -> None:
    """The times' own derivative by slowness is the length of ray by node, taken on another way."""
    scene = placed(line(relief=dome))
    here = grid(scene)
    x, z = np.meshgrid(*here.axes, indexing="ij")
    for u in (scene.assemble(here).start, -np.log(500.0 + 8.0 * x - 30.0 * np.minimum(z, 0.0)).reshape(-1)):
        rays = scene.assemble(here).rays(u)
        found = scene.coverage(here, (4.0, 2.0), rays).values
        times = TravelTimes(here, scene.starts, scene.ends, surface=scene.ground_surface)
        by_node = times.linearise(np.exp(u)).rmatvec(np.ones(len(scene.data)))
        expected = here.local_mean(by_node / here.weights(), (4.0, 2.0))
        assert_allclose(found, expected, atol=1e-6 * expected.max())
        length = sum(np.linalg.norm(np.diff(ray, axis=0), axis=1).sum() for ray in rays)
        assert here.weights() @ found.reshape(-1) == pytest.approx(length, rel=1e-6)
    assert not scene.coverage(here, (4.0, 2.0), (np.empty((0, 2)),)).values.any(), "a lost ray covers nothing"


def test_kept_rays_come_back_from_the_file_of_the_iteration() -> None:
    long = np.column_stack([np.linspace(0, 90, 400), -np.linspace(0, 9, 400)])
    rays = (long, np.empty((0, 2)), long[:5])
    back = rays_of(xr.Dataset(ray_variables(rays)))
    assert [len(ray) for ray in back] == [48, 0, 5]
    assert_allclose(back[0][[0, -1]], long[[0, -1]])
    assert rays_of(xr.Dataset()) == ()


def test_the_surface_goes_through_positions_that_lie_below_no_other() -> None:
    hole = {"receiver_x": np.linspace(20.1, 20.6, 24), "receiver_z": np.linspace(1.0, -20.0, 24)}
    survey = line(shots=np.array([0.0]), relief=dome, times=lambda a, b: np.full(len(a), 0.05), **hole)
    survey["source_x"][:12], survey["source_z"][:12] = 40.0, 1.5
    scene = placed(survey)
    assert scene.ground_surface[0].size == 3
    assert_allclose(np.sort(scene.ground_surface[1]), [dome(np.array(0.0)), 1.0, 1.5])
    assert scene.depth is None  # the hole reaches below a third of the line
    assert placed(line()).depth == pytest.approx(48 / 3)


def test_both_ways_tell_the_error_of_a_time() -> None:
    """Half the mean squared difference of two equal measurements is the variance (common practice)."""
    random = np.random.default_rng(5)
    shots = np.arange(0.0, 40.0, 2.0)
    noisy = line(shots, shots)
    noisy["time"] = noisy["time"] + 4e-4 * random.standard_normal(noisy.sizes["datum"])
    scene = placed(noisy)
    found = reciprocity(scene.starts, scene.ends, scene.data, scene.errors)
    assert found is not None
    assert found.pairs == 190
    assert found.error == pytest.approx(4e-4, rel=0.15)
    assert not found.doubts
    assert any("190 pairs measured both ways" in fact for fact in scene.facts)
    for given in (1e-4, 2e-3):
        doubts = placed(noisy.assign(time_error=0 * noisy["time"] + given)).doubts
        assert any("check [errors]" in doubt for doubt in doubts)


def test_wild_picks_hardly_move_the_error_that_both_ways_tell() -> None:
    shots = np.arange(0.0, 40.0, 2.0)
    noisy = line(shots, shots)
    noisy["time"] = noisy["time"] + 3e-4 * np.random.default_rng(5).standard_normal(noisy.sizes["datum"])
    noisy["time"][[9, 100, 200]] += 1e-2
    scene = placed(noisy)
    found = reciprocity(scene.starts, scene.ends, scene.data, scene.errors)
    assert found is not None
    assert (found.pairs, found.wild) == (190, 3)
    assert found.error == pytest.approx(3e-4, rel=0.15)
    assert not scene.doubts
    assert scene.error_estimate is not None
    assert scene.error_estimate.ratio == pytest.approx(1.0, rel=0.15)
    assert "(3 wild ones left out)" in scene.error_estimate.said


def test_constants_of_places_are_no_errors_of_picks() -> None:
    shots = np.arange(0.0, 24.0, 2.0)
    late = line(shots, shots)
    random = np.random.default_rng(5)
    constant = 2e-3 * random.standard_normal(shots.size)
    number = (late["source_x"].to_numpy() / 2).astype(int)
    late["time"] = late["time"] + constant[number] + 3e-4 * random.standard_normal(late.sizes["datum"])
    scene = placed(late)
    found = reciprocity(scene.starts, scene.ends, scene.data, scene.errors)
    assert found is not None
    assert found.constants
    # 66 pairs less 11 differences of constants: to a tenth.
    assert found.error == pytest.approx(3e-4, rel=0.3)
    assert not scene.doubts
    assert any(
        "by constants of places (errors.statics fits such), beside these" in fact for fact in scene.facts
    )


def test_few_pairs_tell_too_little_to_estimate_errors_by() -> None:
    scene = placed(line(np.arange(0.0, 8.0, 2.0), np.arange(0.0, 48.0, 2.0)))
    assert any("6 pairs measured both ways" in fact for fact in scene.facts)
    assert scene.error_estimate is None


def test_pairs_of_one_way_tell_nothing_of_errors() -> None:
    scene = placed(line())
    assert reciprocity(scene.starts, scene.ends, scene.data, scene.errors) is None
    assert "no pairs measured both ways: the data do not check the errors given" in scene.facts


def test_a_survey_only_planned_has_a_start_and_no_pairs_of_one_place() -> None:
    plan = CurvedRay.Plan.model_validate(
        {
            end: {"first": ["0 m", "0 m", "0 m"], "last": ["40 m", "0 m", "0 m"], "count": count}
            for end, count in (("sources", 5), ("receivers", 21))
        }
    )
    planned = CurvedRay().plan(plan)
    assert planned is not None
    assert planned.sizes["datum"] == 5 * 21 - 5
    scene = placed(planned)
    assert np.ptp(scene.start.velocities) > 0
    assert not any("both ways" in fact for fact in scene.facts)
    assert scene.predict(Ground(1e-3)).max() == pytest.approx(0.04, rel=1e-6)


SURFACE = "x [m],y [m],z [m]\n0,0,0\n24,0,0\n48,0,0\n"
VELOCITIES = "depth [m],velocity [m/s]\n0,400\n10,1500\n"


@pytest.mark.parametrize(
    ("name", "table", "said"),
    [
        (
            "surface",
            SURFACE.replace("24,0,0", "24,0,-2"),
            r"row 26 \(source by 1 m\), .*row 14 \(receiver by 1.92 m\)",
        ),
        ("surface", SURFACE.replace("48,0,0", "30,0,0"), "covers 0 to 30 m along a line of 0 to 48 m"),
        ("start", VELOCITIES.replace("10,", "0,"), "column depth must increase .* row 3 does not, at 0 m"),
        ("start", VELOCITIES.replace("[m/s]", "[m]"), "column velocity: unit 'm' does not convert to m/s"),
        ("start", VELOCITIES.replace("velocity", "v"), "column velocity is missing"),
        ("start", VELOCITIES.replace("1500", "-1500"), r"column velocity must be positive: row 3"),
        (
            "start",
            "line,depth [m],velocity [m/s]\nB,0,400\n",
            "its rows are of B, the survey is of line A; give rows of that line",
        ),
    ],
)
def test_tables_beside_the_survey_that_do_not_fit_are_refused(
    tmp_path: Path, name: str, table: str, said: str
) -> None:
    (tmp_path / "beside.csv").write_text(table)
    survey = line(line=np.full(120, "A"))
    with pytest.raises(SurveyError, match=said):
        placed(survey, tmp_path, **{name: "beside.csv" if name == "start" else Path("beside.csv")})


def test_velocities_of_a_line_are_the_start_of_that_line(tmp_path: Path) -> None:
    table = "line,depth [m],velocity [km/s]\nA,0,0.4\nA,10,1.5\nB,0,3\n"
    (tmp_path / "v.csv").write_text(table)
    scene = placed(line(line=np.full(120, "A")), tmp_path, start="v.csv")
    assert_allclose(scene.start.velocity(np.array([5.0, 20.0])), [950.0, 1500.0])
    assert scene.inputs == (tmp_path / "v.csv",)


@pytest.mark.parametrize(
    ("start", "said"),
    [
        ("1500", "has no unit"),
        ("15 m/s", "is no velocity of the ground"),
        ("gradient", "a table of depth"),
    ],
)
def test_a_start_that_is_none_is_refused(start: str, said: str) -> None:
    with pytest.raises(ValueError, match=said):
        placed(line(), start=start)


@pytest.mark.parametrize(
    ("columns", "said"),
    [
        ({"time": np.full(120, 1e-5)}, r"faster than the fastest ground.*row 7 \(11 m in 0.01 ms\)"),
        ({"receiver_x": np.r_[0.0, np.tile(np.arange(1.0, 48.0, 2.0), 5)[1:]],
          "receiver_y": np.r_[0.3, np.zeros(119)]}, "fall on one point of the section in row 2"),
    ],
)  # fmt: skip
def test_picks_that_no_ground_gives_are_refused(columns: dict[str, Array], said: str) -> None:
    with pytest.raises(SurveyError, match=said):
        placed(line(**columns))
