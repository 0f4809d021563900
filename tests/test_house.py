"""The house rules that tools can keep: lint, format, types, layers, documents that tell the truth."""

from __future__ import annotations

import re
import subprocess
import sys
import tomllib
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[1]
BIN = Path(sys.executable).parent


@pytest.mark.parametrize(
    "command",
    [
        ["ruff", "check", "src", "tests"],
        ["ruff", "format", "--check", "src", "tests"],
        ["mypy"],
        ["lint-imports"],
    ],
    ids=lambda command: " ".join(command[:2]),
)
def test_tools_find_nothing(command: list[str]) -> None:
    tool = BIN / command[0]
    done = subprocess.run(
        [tool, *command[1:]], cwd=ROOT, capture_output=True, text=True, timeout=300, check=False
    )
    assert done.returncode == 0, done.stdout + done.stderr


def test_ci_runs_the_test_command_of_the_readme() -> None:
    lines = re.findall(r"^python3 -m venv .*$", (ROOT / "README.md").read_text(), flags=re.MULTILINE)
    (command,) = [line for line in lines if "pytest" in line]
    assert command in (ROOT / ".ci" / "run").read_text().splitlines()
    assert command in (ROOT / "DEVELOPERS.md").read_text()


def test_every_room_stands_in_the_developers_guide() -> None:
    guide = (ROOT / "DEVELOPERS.md").read_text()
    source = ROOT / "src" / "stillground"
    rooms = {p.stem for p in source.iterdir() if p.is_dir() or p.suffix == ".py"} - {
        "__init__", "__main__", "__pycache__", "py"}  # fmt: skip
    assert not {room for room in rooms if f"`{room}`" not in guide}


def test_rules_and_kinds_stand_in_their_independence_contract() -> None:
    contract = (ROOT / ".importlinter").read_text()
    points = tomllib.loads((ROOT / "pyproject.toml").read_text())["project"]["entry-points"]
    for group in ("stillground.rules", "stillground.physics"):
        for target in points[group].values():
            assert target.partition(":")[0] in contract
