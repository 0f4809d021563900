"""How far the answer depends on what the user chose: lengths, smoothness, background."""

from __future__ import annotations

from collections.abc import Generator
from dataclasses import replace

import numpy as np

from stillground.grid import Grid
from stillground.progress import staged
from stillground.protocols import Array, Measurement, Progress, Sensitivity, Variation
from stillground.reconstruct import Method, Reconstruction, reconstruct

_LENGTHS = {"lengths halved": 0.5, "lengths doubled": 2.0}
_SMOOTHNESS = {"smoothness less 0.5": -0.5, "smoothness plus 0.5": 0.5}
_BACKGROUNDS = {"background less 10 %": 0.9, "background plus 10 %": 1.1}

RECONSTRUCTIONS = 1 + len(_LENGTHS) + len(_SMOOTHNESS) + len(_BACKGROUNDS)
"""How many of them `vary` makes."""


def vary(
    measurement: Measurement, grid: Grid, method: Method, *, logarithmic: bool = False
) -> Generator[Progress, None, Sensitivity]:
    """Reconstructs once as asked and once for each variation, every time with its own pick.

    Parameters
    ----------
    measurement : Measurement
    grid : Grid
        A coarser rung is enough.
    method : Method
    logarithmic : bool
        The unknown is the logarithm of the ground property, and so is what is returned.

    Yields
    ------
    Progress

    Returns
    -------
    Sensitivity
        On ``grid``.

    References
    ----------
    Oldenburg & Li (1999), Estimating depth of investigation in dc resistivity and IP surveys,
    Geophysics 64 (the index from two backgrounds).
    """
    asked = yield from _made(measurement, grid, method, "as asked")
    base = asked.model(asked.stop(method.choose))
    changes = {
        name: replace(method, correlation=tuple(factor * length for length in method.correlation))
        for name, factor in _LENGTHS.items()
    }
    changes |= {
        name: replace(method, smoothness=max(method.smoothness + step, 0.0))
        for name, step in _SMOOTHNESS.items()
    }
    mean = asked.standard.background
    means = {
        name: mean + np.log(factor) if logarithmic else factor * mean for name, factor in _BACKGROUNDS.items()
    }
    cases = {name: (measurement, changed) for name, changed in changes.items()}
    cases |= {name: (replace(measurement, background=other), method) for name, other in means.items()}
    size = grid.norm(base - grid.mean(base))
    models: dict[str, Array] = {}
    variations = []
    for name, (seen, changed) in cases.items():
        found = yield from _made(seen, grid, changed, name)
        stop = found.stop(method.choose)
        models[name] = found.model(stop)
        distance = grid.norm(models[name] - base) / size if size > 0 else 0.0
        variations.append(Variation(name, stop, distance))
    moved = [np.square(models[name] - base) for name in (*_LENGTHS, *_SMOOTHNESS)]
    low, high = (models[name] for name in _BACKGROUNDS)
    less, more = (means[name].reshape(grid.shape) for name in _BACKGROUNDS)
    between = np.abs(more - less)
    return Sensitivity(
        variations=tuple(variations),
        spread=np.sqrt(np.mean(moved, axis=0)),
        investigation=np.divide(np.abs(high - low), between, out=np.zeros(grid.shape), where=between > 0),
    )


def _made(
    measurement: Measurement, grid: Grid, method: Method, name: str
) -> Generator[Progress, None, Reconstruction]:
    return (yield from staged(reconstruct(measurement, grid, method), f"sensitivity: {name}"))
