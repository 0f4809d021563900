"""What the tests share: the demo, a small survey of closed-form times, and the command line."""

from __future__ import annotations

import os
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
import xarray as xr

from stillground.ground import Blob, Ground
from stillground.survey import write_table

ROOT = Path(__file__).parents[1]

BACKGROUND = 1 / 1800
BLOBS = Ground(
    BACKGROUND,
    (
        Blob(0.15 * BACKGROUND, centre=(3.0, -4.0), radii=(1.2, 0.9)),
        Blob(-0.10 * BACKGROUND, centre=(6.0, -8.0), radii=(1.5, 1.0)),
    ),
)


def crosshole(n: int = 12, noise: float = 0.02e-3, seed: int = 3) -> xr.Dataset:
    """Times between boreholes 9 m apart through `BLOBS`, from closed forms, with errors."""
    depths = -np.linspace(0.5, 11.5, n)
    source, receiver = (g.ravel() for g in np.meshgrid(depths, depths, indexing="ij"))
    zeros = np.zeros(n * n)
    starts, ends = np.column_stack([zeros, source]), np.column_stack([zeros + 9.0, receiver])
    times = BLOBS.line_integrals(starts, ends)
    times = times + noise * np.random.default_rng(seed).standard_normal(times.size)
    columns = {
        "source_x": zeros,
        "source_y": zeros,
        "source_z": source,
        "receiver_x": zeros + 9.0,
        "receiver_y": zeros,
        "receiver_z": receiver,
        "time": times,
        "time_error": zeros + noise,
    }
    return xr.Dataset(
        {name: ("datum", values) for name, values in columns.items()},
        coords={"row": ("datum", np.arange(1, n * n + 1))},
        attrs={"source": "small.csv"},
    )


SMALL = """
title = "Small (invented)"
[survey]
kind = "straight-ray"
files = ["small.csv"]
[ground]
spacing = "0.25 m"
correlation = { horizontal = "3 m", vertical = "2 m" }
[solver]
iterations = 20
[refinement]
levels = 3
"""


@pytest.fixture(scope="session")
def demo() -> Path:
    """The demo's configuration."""
    return ROOT / "configs" / "osmere-weir-crosshole.toml"


@pytest.fixture
def survey() -> xr.Dataset:
    """A small survey in memory, SI, with errors."""
    return crosshole()


@pytest.fixture
def small(tmp_path: Path) -> Path:
    """A folder with a small survey and the configuration ``small.toml`` for it."""
    write_table(tmp_path / "small.csv", crosshole())
    (tmp_path / "small.toml").write_text(SMALL)
    return tmp_path


Command = Callable[..., "subprocess.CompletedProcess[str]"]


@pytest.fixture(scope="session")
def stillground() -> Command:
    """Runs the command line in a process of its own, as a user does."""

    def run(
        *arguments: object, cwd: Path | None = None, **environment: str
    ) -> subprocess.CompletedProcess[str]:
        return subprocess.run(
            [sys.executable, "-m", "stillground", *map(str, arguments)],
            cwd=cwd,
            env=os.environ | environment,
            capture_output=True,
            text=True,
            timeout=300,
        )

    return run
