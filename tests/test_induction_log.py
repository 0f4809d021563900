"""A measured conductivity log as the ground: what readings above it give back of it.

The log of a cased water bore comes in the source archive of the `lasio` package (MIT licence), which pip
fetches; it stays out of the repository. Its uppermost 20 m, in which the casing shows, are left out.
"""

from __future__ import annotations

import subprocess
import sys
import tarfile

import numpy as np
import pytest
import xarray as xr
from numpy.testing import assert_allclose

from stillground.grid import Grid
from stillground.ground import Ground, Layer
from stillground.operators.prior_root import PriorRoot
from stillground.physics.induction import Induction, InductionScene, InductionSettings
from stillground.progress import finish
from stillground.reconstruct import Method, Reconstruction, reconstruct
from stillground.solve.lsqr import lsqr
from stillground.stopping.gcv import gcv

ARCHIVED, CURVE = "6038187_v1.2.las", "COND.MS/M"
TOP, STEP = 20.0, 0.05
COILS = np.array([5.0, 10.0, 20.0, 40.0])
NOISE = 0.01


@pytest.fixture(scope="module")
def log(tmp_path_factory: pytest.TempPathFactory) -> np.ndarray:
    """Conductivity in S/m, one value each 5 cm from 20 m down."""
    folder = tmp_path_factory.mktemp("log")
    fetch = ["download", "--quiet", "--no-binary", ":all:", "--no-deps", "lasio", "--dest", str(folder)]
    try:
        done = subprocess.run(
            [sys.executable, "-m", "pip", *fetch], capture_output=True, text=True, timeout=120, check=False
        )
    except subprocess.TimeoutExpired:
        pytest.skip("the source archive of lasio did not come within 2 minutes: no measured log")
    archives = list(folder.glob("lasio-*.tar.gz"))
    if not archives:
        pytest.skip(f"pip cannot fetch the source archive of lasio, so no measured log: {done.stderr[-200:]}")
    with tarfile.open(archives[0]) as archive:
        (member,) = [each for each in archive.getmembers() if each.name.endswith(f"/{ARCHIVED}")]
        content = archive.extractfile(member)
        assert content is not None
        lines = content.read().decode("latin-1").splitlines()
    starts = {line[:2]: number for number, line in enumerate(lines) if line.startswith("~")}
    curves = [
        line.split()[0]
        for line in lines[starts["~C"] + 1 : starts["~P"]]
        if line.strip() and not line.startswith("#")
    ]
    table = np.array([line.split() for line in lines[starts["~A"] + 1 :] if line.strip()], dtype=float)
    depth, values = table[:, 0], table[:, curves.index(CURVE)]
    kept = (depth > TOP) & (values > -99_999)
    assert_allclose(np.diff(depth[kept]), STEP, atol=1e-6)
    return np.asarray(values[kept] / 1000)


def summed(log: np.ndarray, spacing: np.ndarray, vertical: np.ndarray) -> np.ndarray:
    """Readings from the ground over the log, by McNeill's sum over level layers (1980)."""
    z = STEP * np.arange(log.size) / spacing[:, None]
    R = np.where(vertical[:, None], 1 / np.sqrt(4 * z**2 + 1), np.sqrt(4 * z**2 + 1) - 2 * z)
    return np.asarray((R - np.hstack([R[:, 1:], np.zeros((spacing.size, 1))])) @ log)


@pytest.fixture(scope="module")
def scene(log: np.ndarray) -> InductionScene:
    """Five stations 10 m apart over the log, eight readings each, with noise."""
    x = np.repeat(10.0 * np.arange(5), 8)
    spacing, vertical = np.tile(COILS, 10), np.tile(np.repeat([True, False], 4), 5)
    clean = summed(log, spacing, vertical)
    noise = NOISE * clean * np.random.default_rng(4).standard_normal(clean.size)
    columns = {
        "x": x,
        "y": 0 * x,
        "z": 0 * x,
        "height": 0 * x,
        "coil_spacing": spacing,
        "orientation": np.where(vertical, "vertical-dipole", "horizontal-dipole"),
        "reading": clean + noise,
        "reading_error": NOISE * clean,
    }
    survey = xr.Dataset({name: ("datum", values) for name, values in columns.items()})
    return Induction().place(survey, InductionSettings())


def test_described_layers_read_as_mcneills_sum_over_the_log(scene: InductionScene, log: np.ndarray) -> None:
    """The log in layers of 1 m; outside source: the sum over level layers in McNeill (1980)."""
    metre = log[: log.size // 20 * 20].reshape(-1, 20).mean(axis=1)
    layers = [Layer(float(v - metre[-1]), -i - 1.0, -float(i)) for i, v in enumerate(metre[:-1])]
    found = scene.predict(Ground(float(metre[-1]), tuple(layers)))
    assert_allclose(found, summed(np.repeat(metre, 20), scene.spacing, scene.vertical), rtol=1e-12)


def test_the_answer_is_the_log_seen_through_the_resolution(scene: InductionScene, log: np.ndarray) -> None:
    """The iteration is a filter on the singular vectors of the survey: the same filter is put on the log.

    What the answer has beyond it comes from the noise alone, and has the size that the noise gives.
    Outside source: numpy's singular value decomposition.
    """
    grid = Grid((-5.0, -130.0), (10.0, 1.0), (6, 131))
    method = Method((200.0, 10.0), 2.0, lsqr, 12, {"gcv": gcv}, "gcv")
    answer = finish(reconstruct(scene.assemble(grid), grid, method))
    stop = answer.stop("gcv")
    found = answer.model(stop)
    filtered, scatter = through_filter(answer, stop, on_nodes(log, grid))
    inside = slice(20, None)  # below the log's end the nodes hold its last values
    over = (found - filtered)[:, inside] / scatter[:, inside]
    assert 0.5 < np.sqrt(np.mean(over**2)) < 1.5
    answered, seen = found.mean(axis=0)[inside], filtered.mean(axis=0)[inside]
    assert np.corrcoef(answered, seen)[0, 1] > 0.99
    # Measured: a resistive bed in the uppermost 20 m over ground more than twice as conductive.
    elevation = grid.axes[1][inside]
    truth = on_nodes(log, grid)[0, inside]
    for values in (truth, answered):
        assert values[elevation < -30].mean() > 2 * values[(elevation > -18) & (elevation < -4)].mean()


def on_nodes(log: np.ndarray, grid: Grid) -> np.ndarray:
    """The log as a nodal field: means over a metre about each node, its last value below its end."""
    sums = np.concatenate([[0.0], np.cumsum(log) * STEP])
    depth = np.clip(np.stack([-grid.axes[1] - 0.5, -grid.axes[1] + 0.5]), 0.0, STEP * log.size)
    integral = np.interp(depth, STEP * np.arange(log.size + 1), sums)
    width = np.diff(depth, axis=0)[0]
    values = np.where(width > 0.1, np.diff(integral, axis=0)[0] / np.maximum(width, 0.1), log[-200:].mean())
    return np.tile(values, (grid.shape[0], 1))


def through_filter(answer: Reconstruction, stop: float, truth: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """The answer's filter on a ground, and the standard deviation that the noise has through it."""
    standard, grid = answer.standard, answer.grid
    dense = standard.operator.matmat(np.eye(grid.n_nodes))
    U, s, V = np.linalg.svd(dense, full_matrices=False)
    kept = s > 1e-9 * s[0]
    U, s, V = U[:, kept], s[kept], V[kept]
    solution = answer.run.solution(stop)
    share = (V @ solution) * s / (U.T @ standard.b)
    root = standard.prior_root
    assert isinstance(root, PriorRoot)
    coefficients = root.inverse((truth.reshape(-1) - standard.background)[:, None])[:, 0]
    filtered = standard.ground(V.T @ (share * (V @ coefficients)))
    scatter = np.sqrt(np.square(root.matmat(V.T * (share / s))).sum(axis=1))
    return filtered.reshape(grid.shape), scatter.reshape(grid.shape)
