"""All that is registered keeps its contract, the kit catches what does not, and guests run like built-ins."""

from __future__ import annotations

import json
import subprocess
from collections.abc import Callable, Iterator
from itertools import count
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from stillground import plugins
from stillground.protocols import History, Iterate, Pick, RuleOptions
from stillground.solve.lsqr import lsqr
from stillground.testing import check_rule, check_solver

Command = Callable[..., "subprocess.CompletedProcess[str]"]


@pytest.mark.parametrize("name", [plugin.name for plugin in plugins.registered("solvers")])
def test_a_registered_solver_keeps_its_contract(name: str) -> None:
    check_solver(plugins.solver(name))


@pytest.mark.parametrize("name", [plugin.name for plugin in plugins.registered("rules")])
def test_a_registered_rule_keeps_its_contract(name: str) -> None:
    check_rule(plugins.rule(name))


def one_buffer(operator: Any, b: Any) -> Iterator[Iterate]:
    """Yields views of one array, read-only ones."""
    shared = np.zeros((operator.shape[1], b.shape[1]))
    seen = shared.view()
    seen.flags.writeable = False
    for step in lsqr(operator, b):
        shared[:] = step.solution
        yield Iterate(step.index, seen, step.residual)


def writeable(operator: Any, b: Any) -> Iterator[Iterate]:
    for step in lsqr(operator, b):
        yield Iterate(step.index, step.solution.copy(), step.residual)


def begins_late(operator: Any, b: Any) -> Iterator[Iterate]:
    steps = lsqr(operator, b)
    next(steps)
    yield from steps


def false_residual(operator: Any, b: Any) -> Iterator[Iterate]:
    for step in lsqr(operator, b):
        residual = 1.001 * step.residual
        residual.flags.writeable = False
        yield Iterate(step.index, step.solution, residual)


def mixes_columns(operator: Any, b: Any) -> Iterator[Iterate]:
    """The residual fits its solution, but a column stops for the sake of the others."""
    for step in lsqr(operator, b):
        solution = step.solution + step.index * 1e-3 * (step.solution - step.solution.mean(axis=1)[:, None])
        residual = b - operator.matmat(solution)
        solution.flags.writeable = residual.flags.writeable = False
        yield Iterate(step.index, solution, residual)


CALLS = count(1)


def drifts(operator: Any, b: Any) -> Iterator[Iterate]:
    """Keeps state between calls."""
    scale = 1 + 1e-3 * next(CALLS)
    for step in lsqr(operator, b):
        solution = scale * step.solution
        residual = b - operator.matmat(solution)
        solution.flags.writeable = residual.flags.writeable = False
        yield Iterate(step.index, solution, residual)


@pytest.mark.parametrize(
    ("solver", "law"),
    [
        (one_buffer, "prior mean|copies|residual"),
        (writeable, "solution is read-only"),
        (begins_late, "iterate 0 is the prior mean"),
        (false_residual, "residual = b - A x"),
        (mixes_columns, "several columns give what each gives alone"),
        (drifts, "the same call gives the same bits"),
    ],
)
def test_the_kit_catches_a_broken_solver(solver: Any, law: str) -> None:
    with pytest.raises(AssertionError, match=law):
        check_solver(solver)


def mutates(history: History, options: RuleOptions) -> Pick:
    history.residual_norm[0] = 0.0
    return Pick(0.0, True, "no")


def runs_ahead(history: History, options: RuleOptions) -> Pick:
    return Pick(5.0, True, "always the fifth")


def silent(history: History, options: RuleOptions) -> Pick:
    return Pick(0.0, True, "")


def says_it_in_prose(history: History, options: RuleOptions) -> Pick:
    return Pick(None, False, "does not apply: said in words only")


def greedy(history: History, options: RuleOptions) -> Pick:
    assert history.degrees_of_freedom is not None
    return Pick(0.0, True, "needs degrees of freedom")


class Remembers:
    """Counts its calls."""

    calls = 0

    def __call__(self, history: History, options: RuleOptions) -> Pick:
        self.calls += 1
        return Pick(0.0, True, f"call {self.calls}")


@pytest.mark.parametrize(
    ("rule", "law"),
    [
        (mutates, "left as it was|same pick"),
        (runs_ahead, "within the history"),
        (silent, "has a reason"),
        (greedy, "assert"),
        (says_it_in_prose, r"told by Pick\.does_not_apply"),
        (Remembers(), "the same history gives the same pick"),
    ],
)
def test_the_kit_catches_a_broken_rule(rule: Any, law: str) -> None:
    with pytest.raises(AssertionError, match=law):
        check_rule(rule)


GUEST = '''
"""A rule and a solver that somebody else has written."""

from stillground.protocols import Iterate, Pick


def third(history, options):
    return Pick(min(3.0, float(history.last)), True, "always the third")


def frozen(array):
    copy = array.copy()
    copy.flags.writeable = False
    return copy


def landweber(operator, b, *, relaxation=1.0):
    size = operator.rmatvec(operator.matvec(operator.rmatvec(b[:, 0])))
    start = operator.rmatvec(b[:, 0])
    step = relaxation * float(start @ start) / float(start @ size)
    x = 0 * operator.rmatmat(b)
    index = 0
    while True:
        r = b - operator.matmat(x)
        yield Iterate(index, frozen(x), frozen(r))
        x = x + step * operator.rmatmat(r)
        index += 1
'''


@pytest.fixture
def guest(tmp_path: Path) -> Path:
    """A folder as the package installer leaves it, with a plug-in."""
    folder = tmp_path / "guest"
    info = folder / "thirds-0.3.dist-info"
    info.mkdir(parents=True)
    (folder / "thirds.py").write_text(GUEST)
    (info / "METADATA").write_text("Metadata-Version: 2.1\nName: thirds\nVersion: 0.3\n")
    (info / "entry_points.txt").write_text(
        "[stillground.rules]\nthird = thirds:third\n[stillground.solvers]\nlandweber = thirds:landweber\n"
    )
    return folder


def test_an_installed_plug_in_is_listed_with_where_it_comes_from(stillground: Command, guest: Path) -> None:
    listed = stillground("plugins", PYTHONPATH=str(guest))
    assert listed.returncode == 0, listed.stderr
    lines = [line for line in listed.stdout.splitlines() if "thirds 0.3" in line]
    assert len(lines) == 2
    assert any("third" in line for line in lines)
    assert any("landweber" in line for line in lines)


def test_an_installed_plug_in_runs_with_its_rule_solver_and_options(
    stillground: Command, guest: Path, small: Path
) -> None:
    done = stillground(
        "run", small / "small.toml", "--out", small / "out",
        "--set", "solver.method=landweber", "--set", "solver.relaxation=0.9",
        "--set", 'stopping.rules=["third", "gcv"]', "--set", "stopping.choose=third",
        "--set", 'output.products=["history"]', PYTHONPATH=str(guest),
    )  # fmt: skip
    assert done.returncode == 0, done.stderr
    (profile,) = json.loads((small / "out" / "summary.json").read_text())["profiles"]
    assert profile["chosen"]["rule"] == "third"
    assert profile["chosen"]["iteration"] == 3.0
    rules = {rule["rule"]: rule for rule in profile["rules"]}
    assert set(rules) == {"third", "gcv"}
    assert rules["third"]["reason"] == "always the third"


def test_an_option_that_the_guest_does_not_take_is_refused(
    stillground: Command, guest: Path, small: Path
) -> None:
    done = stillground(
        "run", small / "small.toml", "--out", small / "out", "--set", "solver.method=landweber",
        "--set", "solver.ridge=1.0", PYTHONPATH=str(guest),
    )  # fmt: skip
    assert done.returncode == 2
    assert "ridge does not apply to method = 'landweber'; it takes relaxation" in done.stderr
