"""Checkerboards and single bodies of stated sizes through the survey and the stop."""

from __future__ import annotations

from collections.abc import Generator, Sequence

import numpy as np

from stillground.grid import Grid
from stillground.progress import staged
from stillground.protocols import Array, Measurement, Pattern, Progress
from stillground.reconstruct import Method, prepare
from stillground.solve import back, iterate

# Bodies stand this many sizes apart, so that each is seen alone.
_APART = 4.0


def through_patterns(
    coarse: tuple[Grid, Measurement],
    fine: tuple[Grid, Measurement],
    method: Method,
    stop: float,
    sizes: Sequence[float],
    *,
    seed: int,
) -> Generator[Progress, None, tuple[Pattern, ...]]:
    """What comes back of patterns as strong as the survey's own signal, with its errors, at its stop.

    Parameters
    ----------
    coarse, fine : pair of Grid and Measurement
        Where patterns are reconstructed, and where their data come from: nested, fine the finer.
    method : Method
    stop : float
        The iteration of the answer.
    sizes : sequence of float
        Edge of a checkerboard's field, and diameter of a single body, m.
    seed : int
        Of the noise.

    Yields
    ------
    Progress

    Returns
    -------
    tuple of Pattern
        A checkerboard and bodies for each size, on the coarse grid.

    Notes
    -----
    Patterns are one exercise of the survey and no measure of its resolution: what comes back of one of
    them depends on how it falls on the rays.
    """
    grid, measurement = coarse
    problem = prepare(measurement, grid, method, products=2 * len(sizes) * (int(np.ceil(stop)) + 1))
    n_data = measurement.data.size
    kinds = [(name, size) for size in sizes for name in ("checkerboard", "bodies")]
    made = np.column_stack([_pattern(fine[0], name, size) for name, size in kinds])
    seen = fine[1].operator.matmat(made) / measurement.errors[:, None]
    power = np.maximum(np.sum(seen**2, axis=0), np.finfo(float).tiny)
    strength = np.sqrt(max(float(problem.standard.b @ problem.standard.b) - n_data, 0.05 * n_data) / power)
    noise = np.random.default_rng(seed).standard_normal(seen.shape)
    work = iterate(method.solver, problem.operator, strength * seen + noise, int(np.ceil(stop)) + 1)
    runs = yield from staged(work, "patterns through the survey")
    found = []
    for j, (name, size) in enumerate(kinds):
        truth = _pattern(grid, name, size).reshape(grid.shape)
        solution = back(problem.operator, runs[j].inside(stop)[:, None])
        returned = (problem.anomaly(solution)[:, 0] / strength[j]).reshape(grid.shape)
        share = _regression(truth, returned, grid, [2 * size] * len(grid.shape))
        found.append(Pattern(name, size, truth, returned, share))
    return tuple(found)


def _regression(truth: Array, returned: Array, grid: Grid, window: Sequence[float]) -> Array:
    """Local slope of ``returned`` on ``truth``; a smear that follows no body has none."""

    def mean(values: Array) -> Array:
        return grid.local_mean(values, window)

    common = mean(truth * returned) - mean(truth) * mean(returned)
    return common / np.maximum(mean(truth**2) - mean(truth) ** 2, 1e-6)


def _pattern(grid: Grid, name: str, size: float) -> Array:
    """Values between -1 and 1 at the nodes, flattened."""
    axes = np.meshgrid(*(axis - 0.5 * (axis[0] + axis[-1]) for axis in grid.axes), indexing="ij")
    if name == "checkerboard":
        waves = np.prod([np.sin(np.pi * (axis / size + 0.5)) for axis in axes], axis=0)
        return np.asarray(np.sign(np.round(waves, 12))).reshape(-1)
    pitch = _APART * size
    near = [axis - pitch * np.round(axis / pitch) for axis in axes]
    return np.asarray(np.exp(-0.5 * sum(d**2 for d in near) / (size / 2) ** 2)).reshape(-1)
