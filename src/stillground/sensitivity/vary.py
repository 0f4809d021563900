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


def vary(measurement: Measurement, grid: Grid, method: Method) -> Generator[Progress, None, Sensitivity]:
    """Reconstructs once as asked and once for each variation, every time with its own pick.

    Parameters
    ----------
    measurement : Measurement
    grid : Grid
        A coarser rung is enough.
    method : Method

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
    constant = float(asked.standard.background[0])
    changes = {
        name: replace(method, correlation=tuple(factor * length for length in method.correlation))
        for name, factor in _LENGTHS.items()
    }
    changes |= {
        name: replace(method, smoothness=max(method.smoothness + step, 0.0))
        for name, step in _SMOOTHNESS.items()
    }
    changes |= {name: replace(method, background=factor * constant) for name, factor in _BACKGROUNDS.items()}
    size = grid.norm(base - grid.mean(base))
    models: dict[str, Array] = {}
    variations = []
    for name, changed in changes.items():
        found = yield from _made(measurement, grid, changed, name)
        stop = found.stop(method.choose)
        models[name] = found.model(stop)
        distance = grid.norm(models[name] - base) / size if size > 0 else 0.0
        variations.append(Variation(name, stop, distance))
    moved = [np.square(models[name] - base) for name in (*_LENGTHS, *_SMOOTHNESS)]
    low, high = (models[name] for name in _BACKGROUNDS)
    between = constant * float(np.ptp(list(_BACKGROUNDS.values())))
    return Sensitivity(
        variations=tuple(variations),
        spread=np.sqrt(np.mean(moved, axis=0)),
        investigation=np.abs(high - low) / abs(between) if between else np.zeros(grid.shape),
    )


def _made(
    measurement: Measurement, grid: Grid, method: Method, name: str
) -> Generator[Progress, None, Reconstruction]:
    return (yield from staged(reconstruct(measurement, grid, method), f"sensitivity: {name}"))
