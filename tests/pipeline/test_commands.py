"""What the commands do with odd input, interruptions, several lines, and in Python."""

from __future__ import annotations

import json
import os
import re
import shutil
import signal
import subprocess
import sys
import time
import tracemalloc
from collections.abc import Callable
from contextlib import nullcontext
from pathlib import Path
from types import SimpleNamespace

import numpy as np
import pytest
import xarray as xr

import stillground as package
from stillground.config import load
from stillground.errors import CapacityError, ConfigError, SurveyError
from stillground.pipeline.answer import answer
from stillground.pipeline.capacity import memory, rows_on_grid
from stillground.pipeline.grids import plan_grids
from stillground.pipeline.inspect import inspect
from stillground.pipeline.profiles import read_profiles
from stillground.progress import finish
from stillground.survey import write_table

Command = Callable[..., "subprocess.CompletedProcess[str]"]


def rewrite(path: Path, before: str, after: str) -> None:
    text = path.read_text()
    assert before in text
    path.write_text(text.replace(before, after))


@pytest.mark.parametrize(
    ("before", "after", "told"),
    [
        ('files = ["small.csv"]', 'files = ["no.csv"]', "no.csv); mend survey.files"),
        ('spacing = "0.25 m"', 'spacing = "20 m"', "is larger than the survey small"),
        ('spacing = "0.25 m"', 'spacing = "2 m"', "take a smaller ground.spacing"),
        ('spacing = "0.25 m"', 'spacing = "0.1 mm"', "this machine has"),
        ("[solver]", "depth = \"2 m\"\n[solver]", "ground.depth: 2 m reach down to -2.5 m"),
        ("[ground]", "[physics]\nsurface = \"no.csv\"\n[ground]", "no.csv); mend physics.surface"),
        ("[ground]", "[[overlay]]\nfile = \"no.csv\"\n[ground]", "no.csv); mend overlay.file"),
        ("[ground]", "[ground]\nspacng = 1", "did you mean 'spacing'?"),
    ],
)  # fmt: skip
def test_bad_input_is_one_message_exit_2_and_nothing_written(
    stillground: Command, small: Path, before: str, after: str, told: str
) -> None:
    rewrite(small / "small.toml", before, after)
    done = stillground("run", "small.toml", cwd=small)
    assert done.returncode == 2
    assert told in done.stderr
    assert "Traceback" not in done.stderr
    assert not (small / "results").exists()


@pytest.mark.parametrize(
    ("rows", "told"),
    [
        (["0,0,-1,9,0,-1,5.0", "0,0,-2,9,0,-1,x"], "row 3"),
        (["0,0,-1,9,0,-1,5.0", "0,0,-2,9,0,-1"], "row 3"),
        (["0,0,-1,9,0,-1,5.0"], "two"),
        (["0,0,-1,9,0,-1,5.0", "0,0,-1,0,0,-1,5.0"], "row 3"),
        (["0,0,-1,9,0,-1,5.0", "0,0,-2,9,0,-1,-5.0"], "row 3"),
    ],
)
def test_a_faulty_table_is_told_by_row(stillground: Command, small: Path, rows: list[str], told: str) -> None:
    header = ",".join(f"{end}_{axis} [m]" for end in ("source", "receiver") for axis in "xyz") + ",time [ms]"
    (small / "small.csv").write_text("\n".join([header, *rows]) + "\n")
    done = stillground("run", "small.toml", "--set", "errors.floor=0.1 ms", cwd=small)
    assert done.returncode == 2
    assert told in done.stderr
    assert "small.csv" in done.stderr
    assert "Traceback" not in done.stderr


def test_usage_errors_are_exit_2(stillground: Command) -> None:
    for arguments in (["rum"], ["run"], ["run", "a.toml", "--bogus"], ["run", "no.toml"]):
        done = stillground(*arguments)
        assert done.returncode == 2
        assert "Traceback" not in done.stderr


def test_report_makes_the_page_again_from_files_alone(stillground: Command, small: Path) -> None:
    done = stillground("run", "small.toml", "--set", "refinement.levels=2", cwd=small)
    assert done.returncode == 0, done.stderr
    folder = small / "results" / "small"
    page = (folder / "report.html").read_bytes()
    by_mail = small / "by-mail"
    shutil.copytree(folder, by_mail, ignore=shutil.ignore_patterns("report.html", "figures"))
    for name in ("small.toml", "small.csv"):
        (small / name).unlink()
    again = stillground("report", by_mail)
    assert again.returncode == 0, again.stderr
    assert again.stdout.strip() == str(by_mail / "report.html")
    assert (by_mail / "report.html").read_bytes() == page

    (by_mail / "small_ladder.nc").unlink()
    damaged = stillground("report", by_mail)
    assert damaged.returncode == 2
    assert "small_ladder.nc: there is no such file" in damaged.stderr
    assert "Traceback" not in damaged.stderr


def test_a_report_without_what_it_is_made_from_is_refused(stillground: Command, small: Path) -> None:
    done = stillground("run", "small.toml", "--set", "output.products=['report', 'section']", cwd=small)
    assert done.returncode == 2
    assert "'report' is made from the files of history" in done.stderr
    assert not (small / "results").exists()


def test_strict_tells_a_verdict_that_is_not_settled(stillground: Command, small: Path) -> None:
    white = ("--set", "ground.smoothness=0", "--set", "output.products=[]")
    done = stillground("run", "small.toml", "--strict", *white, cwd=small)
    assert done.returncode == 3
    assert "no limit as the grid is refined" in done.stdout, "the white prior is warned of"
    summary = json.loads((small / "results" / "small" / "summary.json").read_text())
    assert summary["verdict"] != "settled"


def test_a_table_is_never_written_over_unasked(stillground: Command, small: Path) -> None:
    with (small / "small.toml").open("a") as config:
        config.write('[simulate]\noutput = "small.csv"\nbackground = "1800 m/s"\n')
    before = (small / "small.csv").read_bytes()
    refused = stillground("simulate", "small.toml", cwd=small)
    assert refused.returncode == 2
    assert "--replace" in refused.stderr
    assert (small / "small.csv").read_bytes() == before
    replaced = stillground("simulate", "small.toml", "--replace", cwd=small)
    assert replaced.returncode == 0, replaced.stderr
    again = package.read_survey(small / "small.csv")
    ends = [np.stack([again[f"{end}_{axis}"] for axis in "xyz"]) for end in ("source", "receiver")]
    # A ground of one velocity: time is distance over velocity (common practice, no source).
    distance = np.linalg.norm(ends[1] - ends[0], axis=0)
    np.testing.assert_allclose(again["time"], distance / 1800, atol=1e-7)


def test_several_lines_give_several_profiles_and_resume_keeps_them(
    stillground: Command, small: Path, survey: xr.Dataset
) -> None:
    lines = np.where(np.arange(survey.sizes["datum"]) % 2, "B 2", "A 1")
    write_table(small / "small.csv", survey.assign(line=("datum", lines)))
    quick = ("--set", "output.products=['section']", "--set", "refinement.levels=2")
    done = stillground("run", "small.toml", *quick, cwd=small)
    assert done.returncode == 0, done.stderr
    folder = small / "results" / "small"
    summary = json.loads((folder / "summary.json").read_text())
    names = [profile["name"] for profile in summary["profiles"]]
    assert names == ["small-A_1", "small-B_2"]
    assert summary["verdict"] == "undecided"

    (folder / "small-B_2_section.nc").unlink()
    kept = (folder / "small-A_1_section.nc").stat().st_mtime_ns
    again = stillground("run", "small.toml", *quick, "--resume", cwd=small)
    assert again.returncode == 0, again.stderr
    assert (folder / "small-A_1_section.nc").stat().st_mtime_ns == kept
    assert (folder / "small-B_2_section.nc").exists()
    assert [p["name"] for p in json.loads((folder / "summary.json").read_text())["profiles"]] == names
    changed = stillground("run", "small.toml", *quick, "--resume", "--set", "solver.iterations=9", cwd=small)
    assert changed.returncode == 0
    assert (folder / "small-A_1_section.nc").stat().st_mtime_ns != kept, "other settings: made again"


def test_an_interruption_judges_what_is_done_and_exits_130(small: Path) -> None:
    rewrite(small / "small.toml", "iterations = 20", "iterations = 10000")
    rewrite(small / "small.toml", 'spacing = "0.25 m"', 'spacing = "0.02 m"')
    work = subprocess.Popen(
        [sys.executable, "-m", "stillground", "run", "small.toml"],
        cwd=small,
        stderr=subprocess.PIPE,
        stdout=subprocess.PIPE,
        text=True,
        env=os.environ | {"PYTHONUNBUFFERED": "1"},
    )
    assert work.stderr is not None
    for line in work.stderr:
        if "rung 2" in line:
            break
    time.sleep(0.3)
    work.send_signal(signal.SIGINT)
    printed, errors = work.communicate(timeout=60)
    assert work.returncode == 130
    assert "interrupted on the grid of" in printed
    assert "Traceback" not in errors
    (folder,) = (small / "results").iterdir()
    summary = json.loads((folder / "summary.json").read_text())
    assert summary["verdict"] != "settled"
    assert len(summary["profiles"][0]["refinement"]["levels"]) < 3
    with xr.open_dataset(folder / "small_section.nc") as section:
        assert section["velocity"].notnull().any()
    assert not [p for p in small.rglob("*") if p.name.startswith(".")]


def test_every_command_teaches_by_example(stillground: Command) -> None:
    for command in ("run", "inspect", "simulate"):
        help_text = stillground(command, "--help").stdout
        assert f"stillground {command}" in help_text
        assert "Example" in help_text
    assert "no clearance to dig" in stillground("--help").stdout
    assert "those of kind curved-ray" in " ".join(stillground("simulate", "--help").stdout.split())
    assert stillground("--version").stdout.startswith("stillground 0")


def test_plugins_and_schema_print(stillground: Command) -> None:
    listed = stillground("plugins").stdout
    kinds = {"straight-ray", "curved-ray", "induction", "downhole", "kernel"}
    for name in (*kinds, "lsqr", "cgls", "discrepancy", "gcv", "stillground"):
        assert name in listed
    choices = json.loads(stillground("schema").stdout)["oneOf"]
    assert kinds <= {choice["title"] for choice in choices}
    assert all(choice["properties"]["ground"] for choice in choices)


def test_python_gets_a_labelled_result_in_one_call(survey: xr.Dataset) -> None:
    result = package.reconstruct_survey(
        survey, ground={"spacing": "0.125 m", "correlation": {"horizontal": "3 m", "vertical": "2 m"}}
    )
    assert result.verdict == "settled"
    assert "settled" in repr(result)
    assert result.picture["velocity"].attrs["units"] == "m s-1"
    shown = result._repr_html_()
    for part in ("settled", "gcv (chosen)", "data:image/png;base64,", "no clearance to dig"):
        assert part in shown
    assert "<script" not in shown
    assert result.plot("ladder").texts
    with pytest.raises(ConfigError, match=r"no figure 'lader'; there are section, errors, rules"):
        result.plot("lader")
    fast = result.picture["slowness"].sel(distance=3, elevation=-4, method="nearest")
    slow = result.picture["slowness"].sel(distance=6, elevation=-8, method="nearest")
    assert float(fast) > 1 / 1800 > float(slow)


def test_xarray_opens_a_survey_table(small: Path) -> None:
    with xr.open_dataset(small / "small.csv", engine="stillground") as ds:
        assert ds["time"].attrs["units"] == "s"
        assert ds.sizes == {"datum": 144}


def test_a_survey_of_several_lines_is_refused_in_memory(survey: xr.Dataset) -> None:
    lines = np.where(np.arange(survey.sizes["datum"]) % 2, "B", "A")
    with pytest.raises(ConfigError, match="holds 2 profiles"):
        package.reconstruct_survey(
            survey.assign(line=("datum", lines)), ground={"spacing": "0.5 m", "correlation": "2 m"}
        )


def test_positions_off_the_section_are_refused_with_row_and_advice(small: Path, survey: xr.Dataset) -> None:
    moved = survey.copy(deep=True)
    moved["receiver_y"][5] += 2.0
    write_table(small / "small.csv", moved)
    config, _ = load(small / "small.toml")
    with pytest.raises(SurveyError, match=r"row \d+ lies .* m off the section plane"):
        read_profiles(config)


def test_true_lengths_keep_the_velocity_of_rays_out_of_the_plane(survey: xr.Dataset) -> None:
    # Even ground: whatever the geometry, the slowness is time over distance (common practice, no source).
    shifted = survey.copy(deep=True)
    shifted["receiver_y"] = shifted["receiver_y"] + 0.4 * (np.arange(survey.sizes["datum"]) % 2)
    ends = [np.stack([shifted[f"{end}_{axis}"] for axis in "xyz"]) for end in ("source", "receiver")]
    shifted["time"] = ("datum", np.linalg.norm(ends[1] - ends[0], axis=0) / 1500)
    result = package.reconstruct_survey(
        shifted, ground={"spacing": "0.5 m", "correlation": "2 m"}, refinement={"levels": 2}
    )
    np.testing.assert_allclose(result.picture["velocity"], 1500, rtol=1e-5)


@pytest.mark.parametrize(
    ("settings", "asked"),
    [
        ([], ["ladder", "products"]),
        (["rehearsal.twins=3", "sensitivity.vary=true"], ["ladder", "rehearsal", "sensitivity", "products"]),
    ],
)
def test_all_long_work_that_is_asked_for_is_timed_beforehand(
    small: Path, settings: list[str], asked: list[str]
) -> None:
    config, _ = load(small / "small.toml", ["rehearsal.twins=0", *settings])
    (plan,) = inspect(config)
    assert list(plan.seconds) == asked
    assert min(plan.seconds.values()) > 0


def test_too_large_a_grid_is_refused_before_it_is_made(small: Path) -> None:
    config, _ = load(small / "small.toml", ["ground.spacing=0.1 mm"])
    (profile,) = read_profiles(config)
    began = time.perf_counter()
    with pytest.raises(CapacityError, match=r"take ground.spacing of [0-9.]+ m or more"):
        plan_grids(profile, config)
    assert time.perf_counter() - began < 5


def test_predicted_memory_covers_what_a_climb_takes(small: Path) -> None:
    config, _ = load(small / "small.toml", ["ground.spacing=0.02 m", "solver.iterations=10"])
    (profile,) = read_profiles(config)
    grids = plan_grids(profile, config)
    tracemalloc.start()
    finish(answer(profile, grids, config))
    _, peak = tracemalloc.get_traced_memory()
    tracemalloc.stop()
    predicted = memory(grids, profile.survey.sizes["datum"], 10)
    assert 0.9 < predicted / peak < 1.6, "predicted over taken"


def test_rows_that_row_action_holds_are_predicted(small: Path) -> None:
    config, _ = load(
        small / "small.toml",
        ["ground.spacing=0.04 m", "solver.iterations=4", "solver.method=kaczmarz",
         'ground.bounds=["1000 m/s", "3000 m/s"]'],
    )  # fmt: skip
    (profile,) = read_profiles(config)
    grids, n_data = plan_grids(profile, config), profile.survey.sizes["datum"]
    assert rows_on_grid(config, n_data)
    tracemalloc.start()
    finish(answer(profile, grids, config))
    _, peak = tracemalloc.get_traced_memory()
    tracemalloc.stop()
    assert memory(grids, n_data, 4) < 0.6 * peak, "the rows are most of it"
    assert 0.9 < memory(grids, n_data, 4, rows=True) / peak < 1.6, "predicted over taken"


def test_rows_too_many_to_hold_are_refused_with_a_method_that_holds_none(
    small: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    settings = ["ground.spacing=0.04 m", 'ground.bounds=["1000 m/s", "3000 m/s"]', "solver.iterations=4"]
    config, _ = load(small / "small.toml", [*settings, "solver.method=kaczmarz"])
    (profile,) = read_profiles(config)
    grids, n_data = plan_grids(profile, config), profile.survey.sizes["datum"]
    free = (memory(grids, n_data, 4) + memory(grids, n_data, 4, rows=True)) // 2
    monkeypatch.setattr("psutil.virtual_memory", lambda: SimpleNamespace(available=free))
    with pytest.raises(CapacityError, match="kaczmarz holds all rows, block-kaczmarz does not"):
        plan_grids(profile, config)
    config, _ = load(small / "small.toml", [*settings, "solver.method=block-kaczmarz"])
    plan_grids(profile, config)


def test_predicted_memory_grows_with_the_grid(small: Path) -> None:
    config, _ = load(small / "small.toml")
    (profile,) = read_profiles(config)
    grids = plan_grids(profile, config)
    assert memory(grids, 144, 20) > memory(grids[:-1], 144, 20)


def test_a_survey_in_memory_needs_no_row_and_may_have_a_crs_and_strange_columns(survey: xr.Dataset) -> None:
    ds = survey.drop_vars("row").assign(note=("datum", np.full(survey.sizes["datum"], "wet")))
    ds = ds.assign(line=("datum", np.full(survey.sizes["datum"], 7)))
    shifted = ds.assign(
        {f"{end}_{axis}": ds[f"{end}_{axis}"] + at
         for end in ("source", "receiver") for axis, at in (("x", 431250.0), ("y", 5312480.0))}
    )  # fmt: skip
    result = package.reconstruct_survey(
        shifted,
        survey={"crs": "EPSG:32631"},
        ground={"spacing": "0.5 m", "correlation": "2 m"},
        refinement={"levels": 1},
    )
    assert result.picture["easting"].attrs["standard_name"] == "projection_x_coordinate"
    assert float(result.picture["easting"].sel(distance=0, method="nearest")) == pytest.approx(431250.0)


def test_noise_on_even_ground_is_told_as_the_background(survey: xr.Dataset) -> None:
    ends = [np.stack([survey[f"{end}_{axis}"] for axis in "xyz"]) for end in ("source", "receiver")]
    random = np.random.default_rng(0)
    times = np.linalg.norm(ends[1] - ends[0], axis=0) / 1800
    noisy = survey.assign(
        time=("datum", times + 0.8 * survey["time_error"].values * random.standard_normal(144))
    )
    result = package.reconstruct_survey(
        noisy, ground={"spacing": "0.5 m", "correlation": "2 m"}, stopping={"choose": "discrepancy"},
        refinement={"levels": 3},
    )  # fmt: skip
    assert result.arrays.chosen.iteration == 0
    assert all(choice.distance is None for choice in result.arrays.choices)
    assert result.summary()["rules"][0]["distance"] is None
    assert max(result.arrays.ladder.change) == 0


def test_running_into_the_last_iteration_is_no_pick_and_never_settled(survey: xr.Dataset) -> None:
    result = package.reconstruct_survey(
        survey, ground={"spacing": "0.25 m", "correlation": "2 m"}, solver={"iterations": 2},
        refinement={"levels": 3},
    )  # fmt: skip
    assert result.arrays.chosen.pick.iteration is None
    assert "raise solver.iterations" in result.arrays.chosen.pick.reason
    assert result.verdict != "settled"


def test_positions_at_one_elevation_are_no_error(survey: xr.Dataset) -> None:
    level = survey.assign(
        source_z=survey["source_z"] * 0, receiver_z=survey["receiver_z"] * 0,
        receiver_x=survey["receiver_x"] + survey["receiver_z"] / 2,
    )  # fmt: skip
    times = (level["receiver_x"] - level["source_x"]).values / 1800
    result = package.reconstruct_survey(
        level.assign(time=("datum", times)),
        ground={"spacing": "0.25 m", "correlation": "2 m"},
        refinement={"levels": 2},
    )
    np.testing.assert_allclose(result.picture["velocity"], 1800, rtol=1e-4)


def test_resume_never_keeps_files_of_another_configuration(stillground: Command, small: Path) -> None:
    quick = ("--set", "output.products=[]", "--set", "refinement.levels=2")
    folder = small / "results" / "small"
    assert stillground("run", "small.toml", *quick, cwd=small).returncode == 0
    other = stillground("run", "small.toml", *quick, "--set", "stopping.choose=discrepancy", cwd=small)
    assert other.returncode == 0
    fit = (folder / "small_fit.csv").read_bytes()
    again = stillground("run", "small.toml", *quick, "--resume", cwd=small)
    assert again.returncode == 0
    assert (folder / "small_fit.csv").read_bytes() != fit, "made again by the first configuration"


def test_inputs_of_one_name_are_told_apart(small: Path, survey: xr.Dataset) -> None:
    (small / "a").mkdir()
    (small / "b").mkdir()
    write_table(small / "a" / "line.csv", survey)
    (small / "b" / "line.csv").write_text("x [m],y [m],z [m]\n0,0,1\n9,0,1\n")
    rewrite(small / "small.toml", "small.csv", "a/line.csv")
    results = package.run_config(
        small / "small.toml",
        out=small / "out",
        overrides=["physics.surface=b/line.csv", "output.products=[]", "refinement.levels=1"],
    )
    digests = results[0].picture.attrs["input_sha256"].splitlines()
    assert [line.split()[1] for line in digests] == ["a/line.csv", "b/line.csv"]


def test_a_surface_below_the_positions_is_refused(small: Path) -> None:
    (small / "low.csv").write_text("x [m],y [m],z [m]\n0,0,-100\n9,0,-100\n")
    config, _ = load(small / "small.toml", ["physics.surface=low.csv"])
    with pytest.raises(SurveyError, match=r"the surface lies 99.5 m under a position"):
        read_profiles(config)


def test_faults_of_several_tables_are_told_together(small: Path) -> None:
    for name in ("one", "two"):
        (small / f"{name}.csv").write_text("source_x [m],time [ms]\n1,2\n")
    rewrite(small / "small.toml", '"small.csv"', '"one.csv", "two.csv"')
    config, _ = load(small / "small.toml")
    with pytest.raises(SurveyError, match="2 tables: 2 faults") as caught:
        read_profiles(config)
    assert all(name in str(caught.value) for name in ("one.csv", "two.csv"))


def test_a_forked_child_computes_too(small: Path) -> None:
    code = (
        "import multiprocessing, numpy as np\n"
        "from stillground import StraightRays\n"
        "from stillground.grid import Grid\n"
        "grid = Grid((0., 0.), (.1, .1), (400, 400))\n"
        "z = np.linspace(0, 39, 60)\n"
        "s = np.column_stack([0 * z, z]); e = np.column_stack([0 * z + 39, z[::-1]])\n"
        "A = StraightRays(grid, np.repeat(s, 60, 0), np.tile(e, (60, 1)), threads=2)\n"
        "x = np.ones(grid.n_nodes); A @ x\n"
        "p = multiprocessing.get_context('fork').Process(target=lambda: A @ x); p.start(); p.join(30)\n"
        "print(p.exitcode)\n"
    )
    if not hasattr(os, "fork"):
        pytest.skip("this system does not fork")
    done = subprocess.run(
        [sys.executable, "-c", code], capture_output=True, text=True, timeout=120, check=True
    )
    assert done.stdout.strip() == "0"


def test_a_rehearsal_writes_its_numbers_and_tells_where(stillground: Command, small: Path) -> None:
    done = stillground(
        "rehearse", small / "small.toml", "--out", small / "out", "--set", "rehearsal.twins=3",
        "--set", "solver.method=block-kaczmarz", "--set", "solver.iterations=6",
    )  # fmt: skip
    assert done.returncode == 0, done.stderr
    file = small / "out" / "small_rehearsal.json"
    assert str(file) in done.stdout.replace("\n", "")
    told = json.loads(file.read_text(encoding="utf-8"))
    assert (told["name"], told["chosen"]) == ("small", "gcv")
    assert set(told["cost"]) == {rule for group in told["groups"] for rule in group}
    assert set(told["families"]["prior"]["gcv"]) == {"median", "p90", "worst"}
    assert "hanke-raus" in told["left_out"]
    assert "hanke-raus does not apply: the method is no polynomial" in " ".join(done.stdout.split())
    assert all(float(f"{value:.6g}") == value for value in told["cost"].values())


def test_few_data_that_are_used_up_are_not_told_to_iterate_on(survey: xr.Dataset) -> None:
    # Four data: after as many iterations the residual is nil and the iteration over.
    few = package.reconstruct_survey(
        survey.isel(datum=[0, 13, 26, 39]), ground={"spacing": "0.5 m", "correlation": "2 m"},
        errors={"outliers": "off"}, refinement={"levels": 2},
    )  # fmt: skip
    reasons = [choice.pick.reason for choice in few.arrays.choices]
    assert few.arrays.history.ended
    assert few.arrays.history.last < 10
    assert not any("solver.iterations" in reason for reason in reasons), reasons


@pytest.mark.parametrize("spacing", ["50 m", "5 m", '{ horizontal = "50 m", vertical = "0.25 m" }'])
def test_the_spacing_that_is_told_is_the_largest_that_works(small: Path, spacing: str) -> None:
    def planned(value: str) -> None:
        config, _ = load(small / "small.toml", [f"ground.spacing={value}"])
        plan_grids(read_profiles(config)[0], config)

    with pytest.raises(ConfigError, match=r"for refinement\.levels = 3 take at most") as refused:
        planned(spacing)
    # Two digits: a tenth more is too much.
    for share in (1.0, 1.1):
        told = [share * float(number) for number in re.findall(r"([\d.]+) m(?: along|$)", str(refused.value))]
        value = f'"{told[0]} m"'
        if len(told) > 1:
            value = f'{{ horizontal = "{told[0]} m", vertical = "{told[1]} m" }}'
        with nullcontext() if share == 1.0 else pytest.raises(ConfigError):
            planned(value)
