"""The whole way of a nonlinear kind: a made-up refraction survey through a run."""

from __future__ import annotations

import json
import re
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest
import xarray as xr
from numpy.testing import assert_allclose
from tests.broken_off import broken_at
from tests.conftest import Command, crosshole
from tests.products.made_up_results import make_result
from tests.refraction_line import V0, K, line, slotnick

from stillground.cli import tables
from stillground.config import Config, load
from stillground.errors import ConfigError
from stillground.grid import Grid
from stillground.operators.curved_rays import TravelTimes
from stillground.pipeline.answer import answer
from stillground.pipeline.grids import plan_grids
from stillground.pipeline.inputs import refuse_to_replace
from stillground.pipeline.inspect import inspect
from stillground.pipeline.labels import ProfileResult
from stillground.pipeline.logarithm import out_of_the_logarithm
from stillground.pipeline.profiles import read_profiles
from stillground.pipeline.recomputed import _doubted
from stillground.pipeline.rehearse import Rehearsed, rehearse_all
from stillground.pipeline.run import Begun, Done, run, run_config
from stillground.pipeline.simulate import described_ground, simulate
from stillground.pipeline.site import recalled
from stillground.progress import finish
from stillground.protocols import (
    Array,
    Average,
    Measurement,
    NonlinearMeasurement,
    Progress,
    Rehearsal,
    Result,
)
from stillground.reconstruct import linearised_at
from stillground.survey import write_table

CONFIG = """
title = "Small (invented)"
[survey]
kind = "curved-ray"
files = ["line.csv"]
[ground]
spacing = "1 m"
correlation = { horizontal = "12 m", vertical = "4 m" }
depth = "14 m"
[physics]
start = "1200 m/s"
[solver]
iterations = 30
[stopping]
rules = ["discrepancy", "gcv"]
choose = "discrepancy"
[refinement]
levels = 2
[output]
products = ["section", "history", "survey"]
"""
NOISE = 2e-4
PLACES = np.arange(0.0, 49.0, 2.0)


def noisy(starts: Array, ends: Array) -> Array:
    return slotnick(starts, ends) + NOISE * np.random.default_rng(8).standard_normal(len(starts))


def surveyed(folder: Path, times: Callable[[Array, Array], Array] = noisy, error: float = NOISE) -> Path:
    """A configuration with its survey: every fourth receiver is shot at, so that some pairs go both ways."""
    survey = line(PLACES[::4], PLACES, times=times)
    survey["time_error"][:] = error
    write_table(folder / "line.csv", survey)
    (folder / "line.toml").write_text(CONFIG)
    return folder / "line.toml"


@pytest.fixture(scope="module")
def done(tmp_path_factory: pytest.TempPathFactory) -> tuple[ProfileResult, Path]:
    folder = tmp_path_factory.mktemp("line")
    (result,) = run_config(surveyed(folder), out=folder / "out")
    return result, folder / "out"


def answered(path: Path, *overrides: str) -> Result:
    config, _ = load(path, overrides)
    (profile,) = read_profiles(config)
    return finish(answer(profile, plan_grids(profile, config), config))


def grid_of(result: Result) -> Grid:
    origin = tuple(float(axis[0]) for axis in result.axes)
    spacing = tuple(float(axis[1] - axis[0]) for axis in result.axes)
    return Grid(origin, spacing, result.model.shape)


def test_the_answer_is_the_ground_that_the_closed_form_belongs_to(done: tuple[ProfileResult, Path]) -> None:
    """v = V0 + K depth (Slotnick 1959), from a start of one velocity."""
    result = done[0].arrays
    x, z = np.meshgrid(*result.axes, indexing="ij")
    seen = (z < 0) & (z > -8) & (x > 8) & (x < 40)
    assert_allclose(np.median(result.model[seen] * (V0 - K * z[seen])), 1.0, atol=0.02)
    assert np.sqrt(np.mean((result.model[seen] * (V0 - K * z[seen]) - 1) ** 2)) < 0.06


def test_the_misfit_is_that_of_the_ground_in_the_product_files(done: tuple[ProfileResult, Path]) -> None:
    """Times marched through the written answer, chi-square by its definition."""
    profile, folder = done
    result = profile.arrays
    scene = profile.profile.scene
    times = TravelTimes(grid_of(result), scene.starts, scene.ends, surface=scene.surface)
    left = (result.observed - times.predict(result.model)) / result.errors
    (entry,) = json.loads((folder / "summary.json").read_text())["profiles"]
    chi_square = entry["chosen"]["chi_square_recomputed"]
    assert chi_square == pytest.approx(np.mean(left**2), rel=1e-4)
    assert 0.7 < chi_square < 1.3
    fit = pd.read_csv(folder / "line_fit.csv")
    assert_allclose(fit["residual_over_error"], left, atol=1e-4)
    assert (fit["weight"] == 1).all()


def test_the_products_of_a_run_are_there(done: tuple[ProfileResult, Path]) -> None:
    profile, folder = done
    (entry,) = json.loads((folder / "summary.json").read_text())["profiles"]
    assert set(entry["start_dependence"]) == {"a quarter slower", "a quarter faster"}
    assert all(0 < moved < 0.2 for moved in entry["start_dependence"].values())
    assert any("last linearisation" in remark for remark in entry["remarks"])
    with xr.open_dataset(folder / "line_section.nc") as section:
        slowness = section["slowness"].transpose("distance", "elevation").to_numpy()[:, ::-1]
        ground = np.isfinite(slowness)
        assert_allclose(slowness[ground], profile.arrays.model[ground], rtol=1e-5)
        assert {"path_density", "mesh_change", "slowness_noise_part", "reliability"} <= set(section)


def test_a_run_does_not_write_over_the_section_it_starts_from(
    tmp_path: Path, done: tuple[ProfileResult, Path], stillground: Command
) -> None:
    path, earlier = surveyed(tmp_path), tmp_path / "out" / "line_section.nc"
    earlier.parent.mkdir()
    earlier.write_bytes(before := (done[1] / "line_section.nc").read_bytes())
    # By another way to the same folder.
    start = f"physics.start={earlier.parent}/../out/line_section.nc"
    told = stillground("run", path, "--set", start, "--out", earlier.parent)
    assert told.returncode == 2
    (said,) = told.stderr.splitlines()[-1:]
    assert said.startswith("stillground: ")
    assert said.endswith(
        "line_section.nc is read by this run, and this run would write over it; give another --out or move it"
    )
    assert [file.name for file in earlier.parent.iterdir()] == [earlier.name]
    assert earlier.read_bytes() == before


def test_whatever_a_run_writes_of_a_profile_is_refused_as_input_and_nothing_else(tmp_path: Path) -> None:
    """The names are those in the folder of a run with all of its products and known ground beside it."""
    path = surveyed(tmp_path)
    (tmp_path / "log.csv").write_text("x [m],y [m],z [m],value [m/s]\n24,0,-3,1000\n")
    products = ["section", "map", "survey", "curtain", "points", "history"]
    asked = [f"output.products={json.dumps(products)}", 'overlay=[{file="log.csv"}]', "refinement.levels=1"]
    config, text = load(path, ["ground.spacing=2 m", *asked])
    finish(run(config, text, tmp_path / "out"))
    (profile,) = read_profiles(config)
    names = {file.name for file in (tmp_path / "out").iterdir()} - {"summary.json"}
    assert {"line_section.nc", "line_curtain.qml", "line_overlay.csv", "map.nc", "survey.nc"} <= names
    for name in names:
        if not name.startswith("map_"):
            reading = replace(profile, scene=replace(profile.scene, inputs=(tmp_path / "out" / name,)))
            with pytest.raises(ConfigError, match=re.escape(f"{name} is read by this run")):
                refuse_to_replace((reading,), config, tmp_path / "out")
    # What is not asked for is not written.
    reading = replace(profile, scene=replace(profile.scene, inputs=(tmp_path / "out" / "line_curtain.nc",)))
    few, _ = load(path, ['output.products=["section"]'])
    refuse_to_replace((reading,), few, tmp_path / "out")
    # A survey beside the products, and a table with the profile's name in its own.
    (tmp_path / "line_surface.csv").write_text("")
    reading = replace(profile, scene=replace(profile.scene, inputs=(tmp_path / "line_surface.csv",)))
    refuse_to_replace((reading,), config, tmp_path)


@pytest.mark.parametrize(("targets", "said"), [(1, "1 outer step: 9, 1"), (2, "2 outer steps: 9, 3, 1")])
def test_outer_steps_are_counted_in_words(
    done: tuple[ProfileResult, Path], capsys: pytest.CaptureFixture[str], targets: int, said: str
) -> None:
    result, folder = done
    assert result.arrays.outer_steps is not None
    misfits = (9.0, 3.0, 1.0)[:: 3 - targets]
    made = (1.8, 1.1)[:targets]
    steps = replace(result.arrays.outer_steps, misfits=misfits, targets=(1.0,) * targets, homing=made)
    tables.profile(Done(replace(result, arrays=replace(result.arrays, outer_steps=steps)), folder))
    out = capsys.readouterr().out
    assert f"misfit over {said}\n" in out
    assert ("own misfit, over 1 step to it: 1.8, 1.1" in out) == (targets == 2)


def test_print_and_notebook_say_the_misfit_of_the_answer_itself_and_every_warning(
    done: tuple[ProfileResult, Path],
) -> None:
    chosen = replace(done[0].arrays.chosen, chi_square=1.0, chi_square_recomputed=2.99)
    arrays = replace(done[0].arrays, chosen=chosen, choices=(chosen,), remarks=("errors < floor",))
    result = replace(done[0], arrays=arrays, advice=("take a finer grid",))
    assert str(result).endswith("misfit 2.99 (1 on its last linearisation)>")
    shown = result._repr_html_()
    assert ">2.99 (1 on its last linearisation)<" in shown
    assert "warning: errors &lt; floor<" in shown
    assert "warning: take a finer grid<" in shown
    linear = replace(arrays, chosen=replace(chosen, chi_square_recomputed=None))
    assert str(replace(result, arrays=linear)).endswith("misfit 1>")


def test_a_line_that_is_recalled_keeps_its_own_misfit(done: tuple[ProfileResult, Path]) -> None:
    profile, folder = done
    files = {"section": "line_section.nc", "history": "line_history.nc", "fit": "line_fit.csv"}
    again = recalled(folder, files, profile.profile, grid_of(profile.arrays))
    own = profile.arrays.chosen.chi_square_recomputed
    assert own != profile.arrays.chosen.chi_square
    assert again.picture.attrs["chosen_chi_square_recomputed"] == own


def test_the_survey_layers_hold_the_rays_of_the_answer(done: tuple[ProfileResult, Path]) -> None:
    profile, folder = done
    result, scene = profile.arrays, profile.profile.scene
    with xr.open_dataset(folder / "survey.nc") as layers:
        counts = layers["ray_node_count"].to_numpy()
        places = np.column_stack([layers[f"ray_{axis}"] for axis in "xyz"])
        assert float(layers["line_misfit"][0]) == pytest.approx(result.chosen.chi_square_recomputed)
    rays = np.split(places, np.cumsum(counts)[:-1])
    assert len(rays) == result.observed.size
    # The line runs due east from 0: x is the distance.
    for ray, start, end in zip(rays, scene.starts, scene.ends, strict=True):
        assert_allclose(ray[[0, -1]][:, [0, 2]], [start, end], atol=1e-3)
    longest = int(np.argmax(np.abs(scene.ends[:, 0] - scene.starts[:, 0])))
    # A wave over X turns at the depth (sqrt(V0^2 + (K X / 2)^2) - V0) / K (Slotnick 1959).
    depth = (np.hypot(V0, K * 48 / 2) - V0) / K
    assert rays[longest][:, 2].min() == pytest.approx(-depth, rel=0.25)


def test_coverage_is_that_of_the_rays_of_the_answer(done: tuple[ProfileResult, Path]) -> None:
    result = done[0].arrays
    length = sum(np.linalg.norm(np.diff(ray, axis=0), axis=1).sum() for ray in result.rays)
    assert grid_of(result).weights() @ result.coverage.values.reshape(-1) == pytest.approx(length, rel=1e-6)
    # Rays through the start are level: all of them run along the surface.
    deep = result.axes[1] < -5
    assert result.coverage.values.reshape(result.model.shape)[20:40, deep].min() > 0


def test_wild_picks_are_found_and_lose_their_weight(tmp_path: Path) -> None:
    def wild(starts: Array, ends: Array) -> Array:
        times = noisy(starts, ends)
        times[[20, 90]] += 8e-3
        return times

    result = answered(surveyed(tmp_path, wild))
    assert result.weights[[20, 90]].max() < 0.01
    assert np.median(result.weights) > 0.8
    left = (result.observed - result.predicted) / result.errors * np.sqrt(result.weights)
    assert result.chosen.chi_square_recomputed is not None
    # The mean is scaled by what the weights take from normal residuals: an eighth or so of it.
    assert np.mean(left**2) / result.chosen.chi_square_recomputed == pytest.approx(0.76, abs=0.05)


@pytest.mark.parametrize("contrast", [0.0, 0.01])
def test_ground_of_nearly_one_velocity_gives_the_answer_of_straight_rays(
    tmp_path: Path, contrast: float
) -> None:
    """The same survey as kind straight-ray, whose operator and unknown are others."""
    survey = crosshole(8)
    starts, ends = (
        np.column_stack([survey[f"{end}_{axis}"] for axis in "xz"]) for end in ("source", "receiver")
    )
    straight = np.linalg.norm(ends - starts, axis=1) / 1800
    survey["time"][:] = straight + contrast / 0.15 * (survey["time"].to_numpy() - straight)
    survey["time_error"][:] = 1e-5
    write_table(tmp_path / "small.csv", survey)
    text = CONFIG.replace("line.csv", "small.csv").replace('depth = "14 m"\n', "").replace('"12 m"', '"3 m"')
    text = text.replace('"4 m"', '"2 m"').replace('"1 m"', '"0.5 m"')
    (tmp_path / "curved.toml").write_text(text.replace("1200", "1800"))
    text = text.replace("curved-ray", "straight-ray").replace('[physics]\nstart = "1200 m/s"\n', "")
    (tmp_path / "straight.toml").write_text(text)
    curved = answered(tmp_path / "curved.toml")
    flat = answered(tmp_path / "straight.toml", "ground.background=1800 m/s")
    difference = np.sqrt(np.mean((curved.model * 1800 - flat.model * 1800) ** 2))
    assert difference < (1e-4 if contrast == 0 else 0.15 * contrast)


def test_outer_steps_broken_off_on_a_rung_leave_the_rungs_before(tmp_path: Path) -> None:
    path = surveyed(tmp_path)
    whole, result = answered(path), broken_at(path, "outer steps on rung 2 of 2")
    assert result.interrupted
    assert len(result.ladder.rungs) == 1
    assert "interrupted on the grid of 2 m" in result.remarks[0]
    assert np.isnan(result.noise_part).all()
    assert len(result.rays) == result.observed.size
    assert_allclose(result.model, whole.ladder.rungs[0].model, rtol=0.02)


def test_a_start_that_is_broken_off_leaves_the_answer(tmp_path: Path) -> None:
    result = broken_at(surveyed(tmp_path), "start: a quarter")
    assert result.interrupted
    assert (len(result.ladder.rungs), dict(result.start_dependence)) == (2, {})
    assert np.isfinite(result.noise_part).all()


def test_a_run_broken_off_before_anything_is_whole_keeps_the_profiles_finished(tmp_path: Path) -> None:
    path = surveyed(tmp_path)
    (tmp_path / "second.csv").write_bytes((tmp_path / "line.csv").read_bytes())
    config, text = load(path, ['survey.files=["line.csv", "second.csv"]'])
    work, finished = run(config, text, tmp_path / "out"), 0
    for event in work:
        finished += isinstance(event, Done)
        if finished and isinstance(event, Progress) and "nonlinear" in event.stage:
            break
    with pytest.raises(KeyboardInterrupt):
        work.throw(KeyboardInterrupt)
    summary = json.loads((tmp_path / "out" / "summary.json").read_text())
    assert [profile["name"] for profile in summary["profiles"]] == ["line"]
    assert not list((tmp_path / "out").glob("second*"))


@pytest.mark.parametrize("pattern", [False, True])
def test_a_rehearsal_broken_off_in_the_outer_steps_ends_there(tmp_path: Path, pattern: bool) -> None:
    config, text = load(surveyed(tmp_path))
    work = rehearse_all(config, text, tmp_path / "out", command="", pattern=pattern)
    for event in work:
        if isinstance(event, Progress) and "rung 2 of 2" in event.stage:
            break
    with pytest.raises(KeyboardInterrupt):
        finish(work) if work.throw(KeyboardInterrupt) else None
    assert not list((tmp_path / "out").glob("*"))


def test_the_answer_fits_by_itself_or_is_not_settled(tmp_path: Path) -> None:
    result = answered(surveyed(tmp_path), "physics.start=2500 m/s")
    assert result.outer_steps is not None
    homing, own = result.outer_steps.homing, result.chosen.chi_square_recomputed
    assert own is not None
    assert own < 1.5 or result.ladder.verdict.word != "settled"
    assert homing[-1] <= homing[0]
    settled = replace(result.ladder, verdict=replace(result.ladder.verdict, word="settled"))
    poor = replace(result.chosen, chi_square_recomputed=3.0)
    doubted = _doubted(settled, poor, trust=True).verdict
    assert doubted.word == "undecided"
    assert "misfit of 3" in doubted.reason
    assert _doubted(settled, replace(poor, chi_square_recomputed=1.2), trust=True) is settled
    # Of errors half as large as stated a misfit of 4 is right, but only where they are not trusted.
    fair = replace(poor, chi_square=4.0, chi_square_recomputed=5.0)
    assert _doubted(settled, fair, trust=True).verdict.word == "undecided"
    assert _doubted(settled, fair, trust=False) is settled


def test_rays_along_the_base_of_the_ground_are_told(tmp_path: Path) -> None:
    path = surveyed(tmp_path)
    shallow, deep = answered(path, "ground.depth=4 m", "ground.margin=1 m"), answered(path)
    assert any("rays run along the base" in remark for remark in shallow.remarks)
    assert not any("rays run along the base" in remark for remark in deep.remarks)


def test_a_delay_found_with_bent_rays_has_no_error_and_says_so(tmp_path: Path) -> None:
    result = answered(surveyed(tmp_path), "errors.delay=fit")
    assert result.extras["delay"].deviation is None
    assert any("depends on where the fit starts" in remark for remark in result.remarks)


def test_a_background_beside_a_start_is_refused(tmp_path: Path) -> None:
    with pytest.raises(ConfigError, match=r"ground\.background: curved-ray is told by its own settings"):
        answered(surveyed(tmp_path), "ground.background=900 m/s")


def test_times_that_nothing_fits_are_not_taken_for_outliers(tmp_path: Path) -> None:
    late = surveyed(tmp_path, lambda starts, ends: noisy(starts, ends) + 0.1)
    assert np.all(answered(late).weights == 1)


def causes(path: Path, *overrides: str) -> tuple[str, ...]:
    """What is said right after that the target was not reached."""
    remarks = answered(path, *overrides).remarks
    (at,) = (i for i, remark in enumerate(remarks) if "its target is 1" in remark)
    return tuple(remark for remark in remarks[at + 1 :] if "last linearisation" not in remark)


def test_errors_too_small_are_named_where_both_ways_tell_them(tmp_path: Path) -> None:
    (said,) = causes(surveyed(tmp_path, error=NOISE / 2.5), "refinement.levels=1", "ground.spacing=2 m")
    assert said.startswith("the errors stated are too small: 21 pairs measured both ways differ as errors of")
    assert "given for them are 0.08 ms" in said


def test_without_a_fit_rules_ask_for_the_misfit_that_the_outer_steps_came_to(tmp_path: Path) -> None:
    path = surveyed(tmp_path, error=NOISE / 2.5)
    result = answered(path, "refinement.levels=1", "ground.spacing=2 m")
    assert result.outer_steps is not None
    reached = result.outer_steps.misfits[-1]
    assert result.options.tau**2 == pytest.approx(reached)
    assert result.chosen.chi_square == pytest.approx(reached, rel=0.05)
    own = result.chosen.chi_square_recomputed
    assert own is not None
    assert own < 3 * reached
    # Rules that need no errors see the whole history.
    assert result.history.last == 30


def test_constants_of_sources_are_named_rather_than_errors_too_small(tmp_path: Path) -> None:
    def late(starts: Array, ends: Array) -> Array:
        return noisy(starts, ends) + np.where(starts[:, 0] % 16 < 8, 1e-3, -1e-3)

    (said,) = causes(surveyed(tmp_path, late), "errors.outliers=off")
    assert said.startswith(
        "sources or receivers have constants of their own: 21 pairs measured both ways differ"
    )
    assert said.endswith("set errors.statics")


def test_a_wild_pick_is_named_by_its_row(tmp_path: Path) -> None:
    def wild(starts: Array, ends: Array) -> Array:
        times = noisy(starts, ends)
        times[100] += 1e-2
        return times

    (said,) = causes(surveyed(tmp_path, wild), "errors.outliers=off")
    assert "far off all others: row 102 (+" in said
    assert said.endswith('set use to 0, or set errors.outliers = "tukey"')


def test_a_grid_too_coarse_is_named_with_the_next_finer_ones_misfit(tmp_path: Path) -> None:
    (said,) = causes(surveyed(tmp_path), "ground.spacing=3 m")
    assert said.startswith("the grid is too coarse for the data: on nodes of 6 m the misfit is ")
    assert said.endswith("take ground.spacing of 1.5 m or less")


def test_what_was_looked_at_is_told_where_no_cause_is_found(tmp_path: Path) -> None:
    """Times that vary from pick to pick alike both ways, as no ground of such lengths makes them."""

    def ruffled(starts: Array, ends: Array) -> Array:
        phase = 3.0 * (starts[:, 0] + ends[:, 0])
        return noisy(starts, ends) + 2e-3 * np.sin(phase)

    (said,) = causes(surveyed(tmp_path, ruffled), "errors.outliers=off", "refinement.levels=1")
    assert said.startswith("of the usual causes of a misfit of ")
    assert "the errors stated are right (21 pairs measured both ways differ as errors of 0.2" in said
    assert "no datum lies far off all others; left are constants of sources" in said


def test_errors_that_both_ways_contradict_are_told_before_any_work(tmp_path: Path) -> None:
    config, text = load(surveyed(tmp_path, error=NOISE / 2))
    events = run(config, text, tmp_path / "out")
    seen: list[Progress | Begun | Done] = []
    while not seen or not isinstance(seen[-1], Begun):
        seen.append(next(events))
    events.close()
    assert {event.stage for event in seen[:-1] if isinstance(event, Progress)} == {"reading the survey"}
    (doubt,) = seen[-1].profile.scene.doubts
    assert "measured both ways are 0.2" in doubt
    assert "times the 0.1 ms given: with these the misfit cannot come to 1" in doubt


def test_a_result_leaves_the_logarithm_as_the_exponential_function_does() -> None:
    """Errors against a finite change: exp(u + e) - exp(u), for a small e."""
    made = make_result(spacing=1.0, levels=3)
    grid, small = grid_of(made), 1e-6
    assert made.rehearsal is not None
    assert made.sensitivity is not None
    u, weights = np.log(made.model), grid.weights() / grid.weights().sum()
    choices = tuple(replace(choice, model=np.log(choice.model)) for choice in made.choices)
    rungs = tuple(replace(rung, model=np.log(rung.model)) for rung in made.ladder.rungs)
    field = small * (2 + np.sin(u))
    logarithmic = replace(
        made,
        model=u,
        background=np.log(made.background),
        choices=choices,
        chosen=choices[2],
        snapshots=tuple((k, np.log(model)) for k, model in made.snapshots),
        ladder=replace(made.ladder, rungs=rungs),
        mesh_change=field,
        noise_part=2 * field,
        rehearsal=replace(made.rehearsal, total_error=3 * field, average_errors={"all": 3 * small}),
        sensitivity=replace(made.sensitivity, spread=4 * field),
        averages={"all": Average(float(weights @ u.reshape(-1)), small, 3 * small)},
    )
    found = out_of_the_logarithm(logarithmic, grid, {"all": weights})
    assert found.rehearsal is not None
    assert found.sensitivity is not None
    for there, here in (
        (found.model, made.model),
        (found.background, made.background),
        (found.chosen.model, made.choices[2].model),
        *((one.model, other.model) for one, other in zip(found.choices, made.choices, strict=True)),
        *((one.model, other.model) for one, other in zip(found.ladder.rungs, made.ladder.rungs, strict=True)),
        *((one[1], other[1]) for one, other in zip(found.snapshots, made.snapshots, strict=True)),
    ):
        assert_allclose(there, here, rtol=1e-12)
    assert any(found.chosen is choice for choice in found.choices)
    for times, error in enumerate(
        (found.mesh_change, found.noise_part, found.rehearsal.total_error, found.sensitivity.spread), start=1
    ):
        assert_allclose(error, np.exp(u + times * field) - np.exp(u), rtol=1e-4)
    mean = found.averages["all"]
    assert mean.value == pytest.approx(weights @ made.model.reshape(-1))
    assert mean.noise_part == pytest.approx(small * mean.value)
    assert mean.total_error == pytest.approx(found.rehearsal.average_errors["all"])
    assert mean.total_error == pytest.approx(3 * small * mean.value)
    root_mean_square = np.sqrt(weights @ (made.model.reshape(-1) - mean.value) ** 2)
    assert found.anomaly == pytest.approx(root_mean_square)
    # Iterates that leave all ground behind are cut rather than infinite.
    wild = replace(logarithmic, snapshots=((3, u + 1e3), (4, u - 1e3)))
    cut = out_of_the_logarithm(wild, grid, {"all": weights}).snapshots
    assert np.isfinite(cut[0][1]).all()
    assert (cut[1][1] > 0).all()
    # What is relative stays that of the logarithm.
    assert found.ladder.change == made.ladder.change
    assert found.ladder.verdict == made.ladder.verdict
    assert out_of_the_logarithm(replace(logarithmic, anomaly=0.0), grid, {"all": weights}).anomaly == 0.0


@pytest.mark.parametrize("levels", [1, 2, 3])
def test_outer_steps_are_planned_within_a_factor_of_two(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, levels: int
) -> None:
    """By a clock that goes on by the nodes of the grid with each linearisation and stands still otherwise."""
    clock = [0.0]

    def ticking(measurement: NonlinearMeasurement, *given: Any) -> tuple[Measurement, Array]:
        clock[0] += measurement.start.size
        return linearised_at(measurement, *given)

    monkeypatch.setattr("stillground.pipeline.inspect.linearised_at", ticking)
    monkeypatch.setattr("stillground.reconstruct.linearising.linearised_at", ticking)
    config, _ = load(surveyed(tmp_path), [f"refinement.levels={levels}", "ground.spacing=1 m"])
    with monkeypatch.context() as patch:
        patch.setattr("stillground.pipeline.inspect.time.perf_counter", lambda: clock[0])
        (plan,) = inspect(config)
    began = clock[0]
    finish(answer(plan.profile, plan.grids, config))
    assert 0.5 < plan.seconds["outer steps"] / (clock[0] - began) < 2.0


SIMULATED = """
[simulate]
output = "line.csv"
noise = "0.2 ms"
background = "1500 m/s"
[[simulate.layer]]
bottom = "-5 m"
value = "700 m/s"
"""


def test_a_rehearsal_takes_part_of_the_described_ground_that_the_survey_is_of(tmp_path: Path) -> None:
    """Its data are marched, not those of the linearisation that is judged; another ground is left out."""
    path = surveyed(tmp_path)
    path.write_text(CONFIG + '[errors]\nfloor = "0.2 ms"\n' + SIMULATED)
    config, text = load(path, ["rehearsal.twins=4"])
    simulate(config, replace=True)

    def rehearsed(config: Config) -> Rehearsal:
        found = list(rehearse_all(config, text, tmp_path / "out", command="rehearse", pattern=False))
        assert isinstance(found[-1], Rehearsed)
        return found[-1].rehearsal

    ratios = rehearsed(config).ratios
    assert set(ratios) == {"prior", "layers", "described"}
    assert ratios["described"]["discrepancy"].max() < 1.5
    other, _ = load(path, ["rehearsal.twins=4", "simulate.background=1700 m/s"])
    assert set(rehearsed(other).ratios) == {"prior", "layers"}


def test_why_a_described_ground_takes_no_part_in_a_rehearsal_is_told(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """By `rehearse` and by a run that rehearses, with the misfit by its definition."""
    path = surveyed(tmp_path)
    path.write_text(CONFIG + '[errors]\nfloor = "0.2 ms"\noutliers = "off"\n' + SIMULATED)
    few = ("rehearsal.twins=3", "ground.spacing=1.5 m")
    config, text = load(path, few)
    (profile,) = read_profiles(config)
    assert config.simulate is not None
    data = profile.scene.predict(described_ground(config.simulate, config.kind.axes))
    misfit = np.mean((profile.survey["time"].values - data) ** 2 / profile.survey["time_error"].values ** 2)
    said = (
        f"the ground of [simulate] takes no part in the rehearsal: its data have a misfit of {misfit:.3g} to "
        f"the survey's, and the rehearsal reaches no ground with more than 4"
    )
    (entry,) = list(rehearse_all(config, text, tmp_path / "out", command="rehearse", pattern=False))[-1:]
    assert isinstance(entry, Rehearsed)
    tables.rehearsal(entry)
    assert capsys.readouterr().out.count(f"warning: {said}") == 1
    (told,) = json.loads(entry.file.read_text())["remarks"]
    assert told.startswith(said)
    assert told in answered(path, *few).remarks
