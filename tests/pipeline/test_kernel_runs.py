"""Laws of runs with given kernels: the answer knows neither the rule of quadrature nor the grid."""

from __future__ import annotations

import json
from functools import cache
from pathlib import Path

import numpy as np
import pytest
import xarray as xr
from tests.conftest import ROOT, Command

from kernel_tables import CONFIG, integration, write_survey
from published_problems import PROBLEMS
from stillground.config import load
from stillground.pipeline.labels import ProfileResult
from stillground.pipeline.run import run_config
from stillground.pipeline.simulate import simulate
from stillground.quadrature import RULES

EVEN, UNEVEN = ("trapezoid", "gauss-2"), ("simpson", "gauss-3")


def truth(x: np.ndarray) -> np.ndarray:
    return np.sin(np.pi * x) + 0.5 * np.sin(3 * np.pi * x)


def integral(x: np.ndarray) -> np.ndarray:
    return (1 - np.cos(np.pi * x)) / np.pi + (1 - np.cos(3 * np.pi * x)) / (6 * np.pi)


@pytest.fixture(scope="module")
def answered(tmp_path_factory: pytest.TempPathFactory):  # type: ignore[no-untyped-def]
    """Runs of the integration operator by rule, weights and smoothness, each once."""
    folder = tmp_path_factory.mktemp("integration")
    nodes, ends, kernels = integration(513, 16)
    path = write_survey(folder, nodes, kernels, integral(ends), 0.01)

    @cache
    def run(rule: str, weights: str, smoothness: float) -> ProfileResult:
        settings = [
            f"physics.quadrature={rule}",
            f"physics.weights={weights}",
            f"ground.smoothness={smoothness}",
            "ground.background=0",
            "solver.method=cgls",
            "stopping.choose=discrepancy",
        ]
        (result,) = run_config(path, out=folder / f"{rule}-{weights}-{smoothness:g}", overrides=settings)
        return result

    return run


def error(result: ProfileResult) -> float:
    (x,) = result.arrays.axes
    weights = np.gradient(x)
    return float(np.sqrt(weights @ (result.arrays.model - truth(x)) ** 2 / (weights @ truth(x) ** 2)))


def test_plain_iterations_follow_uneven_weights_on_every_grid(answered) -> None:  # type: ignore[no-untyped-def]
    # Integration operator: common practice, no source. The minimum-norm answer without weights is the true
    # one times each node's weight over their mean: 1 -+ 1/3 for Simpson's rule, 5/6, 4/3, 5/6 for Gauss'.
    sawtooth = {"simpson": 1 / 3, "gauss-3": np.std([5 / 6, 4 / 3, 5 / 6])}
    for rule in UNEVEN:
        result = answered(rule, "naive", 0.0)
        assert error(result) == pytest.approx(sawtooth[rule], rel=0.1)
        assert result.verdict == "drifting"
        change = result.arrays.ladder.change
        assert change[-1] > 0.5
        assert change[-1] == pytest.approx(change[0], rel=0.02)


def test_plain_iterations_are_safe_with_even_weights_only(answered) -> None:  # type: ignore[no-untyped-def]
    for rule in EVEN:
        result = answered(rule, "naive", 0.0)
        assert error(result) == pytest.approx(error(answered("trapezoid", "standard", 0.0)), rel=0.05)
        # What is left are the steps of a white answer, nearer and nearer to their places.
        assert max(result.arrays.ladder.change) < 0.1


@pytest.mark.parametrize("rule", RULES)
def test_without_weights_no_answer_is_called_settled(answered, rule: str) -> None:  # type: ignore[no-untyped-def]
    result = answered(rule, "naive", 0.0)
    assert result.verdict != "settled"
    said = "the prior does not know the weights of the quadrature"
    assert said in result.arrays.ladder.verdict.reason
    assert said in result.picture.attrs["comment"]
    assert any(sentence.startswith("physics.weights: " + said) for sentence in result.advice)


@pytest.mark.parametrize("smoothness", [0.0, 2.0])
def test_in_standard_form_every_rule_gives_the_trapezoids_answer(answered, smoothness: float) -> None:  # type: ignore[no-untyped-def]
    wanted = error(answered("trapezoid", "standard", smoothness))
    for rule in RULES:
        assert error(answered(rule, "standard", smoothness)) == pytest.approx(wanted, rel=0.03)
        assert (
            "weights of the quadrature" not in answered(rule, "standard", smoothness).picture.attrs["comment"]
        )


@pytest.mark.parametrize("rule", RULES)
def test_in_standard_form_the_ladder_settles(answered, rule: str) -> None:  # type: ignore[no-untyped-def]
    result = answered(rule, "standard", 2.0)
    assert result.verdict == "settled", result.arrays.ladder.verdict.reason


@pytest.mark.parametrize("rule", ["trapezoid", "simpson"])
def test_the_ladder_is_of_second_order_on_a_smooth_prior(answered, rule: str) -> None:  # type: ignore[no-untyped-def]
    # Functions linear between nodes: second order (common practice, no source).
    assert answered(rule, "standard", 2.0).arrays.ladder.verdict.order == pytest.approx(2.0, abs=0.1)


def published(name: str, folder: Path) -> tuple[Path, np.ndarray, np.ndarray]:
    """A problem with errors of a thousandth; nodes and exact solution at them."""
    problem, (a, b), (c, d), length = PROBLEMS[name]
    nodes = np.linspace(c, d, 193)
    kernels, solution, data = problem(np.linspace(a, b, 97), nodes)
    if data is None:
        data = kernels * np.r_[0.5, np.ones(191), 0.5] * (nodes[1] - nodes[0]) @ solution
    path = write_survey(folder, nodes, kernels, data, 1e-3)
    path.write_text(CONFIG.replace('"0.1 m"', f'"{length} m"'))
    return path, nodes, solution


@pytest.mark.parametrize("rule", RULES)
def test_a_published_problem_comes_back_through_the_whole_chain(rule: str, tmp_path: Path) -> None:
    # Phillips (1962), see published_problems.py.
    path, nodes, solution = published("phillips", tmp_path)
    (result,) = run_config(path, out=tmp_path / "out", overrides=[f"physics.quadrature={rule}"])
    assert result.verdict == "settled", result.arrays.ladder.verdict.reason
    found = np.interp(nodes, result.arrays.axes[0], result.arrays.model)
    assert np.linalg.norm(found - solution) < 0.05 * np.linalg.norm(solution)


@pytest.mark.parametrize(
    ("weights", "code", "verdict"), [("standard", 0, "settled"), ("naive", 3, "drifting")]
)
def test_the_demo_settles_unless_the_weights_are_hidden(
    stillground: Command, tmp_path: Path, weights: str, code: int, verdict: str
) -> None:
    settings = ["physics.quadrature=simpson", f"physics.weights={weights}", 'output.products=["section"]']
    overrides = [word for setting in settings for word in ("--set", setting)]
    config = ROOT / "configs" / "osmere-weir-kernel.toml"
    done = stillground("run", config, "--out", tmp_path, "--strict", "--quiet", *overrides)
    assert done.returncode == code, done.stderr
    assert json.loads((tmp_path / "summary.json").read_text())["verdict"] == verdict
    column = xr.open_dataset(tmp_path / "moisture_column.nc")
    assert column["water_content"].sizes == {"elevation": 129}


def test_the_demo_readings_are_those_of_the_described_ground(tmp_path: Path) -> None:
    config, _ = load(ROOT / "configs" / "osmere-weir-kernel.toml", [f'simulate.output="{tmp_path}/made.csv"'])
    written, _ = simulate(config)
    assert written.read_bytes() == (ROOT / "datasets" / "osmere-weir" / "moisture.csv").read_bytes()


def test_what_kernels_do_not_have_is_not_told(stillground: Command, tmp_path: Path) -> None:
    config = ROOT / "configs" / "osmere-weir-kernel.toml"
    seen = stillground("inspect", config, "--out", tmp_path)
    assert "\nerrors made from floor\n" in seen.stdout, "there are no positions to count"
    ran = stillground("run", config, "--out", tmp_path, "--set", 'output.products=["map"]')
    assert "writing the map" not in ran.stderr
    assert not (tmp_path / "map.nc").exists()
    assert "background 0.2727\n" in ran.stdout, "a share has no unit"
