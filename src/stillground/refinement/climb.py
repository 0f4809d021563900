"""The ladder: one reconstruction a rung, compared at equal iteration on the finest grid."""

from __future__ import annotations

from collections.abc import Callable, Generator, Sequence
from dataclasses import dataclass
from itertools import pairwise

import numpy as np

from stillground.grid import Grid, prolong
from stillground.progress import staged
from stillground.protocols import Array, Ladder, Measurement, Progress, Rung
from stillground.reconstruct import Method, Reconstruction, reconstruct
from stillground.refinement.expected import WITHOUT_WEIGHTS, expected_order, rough_limit
from stillground.refinement.grid_index import grid_index
from stillground.refinement.jitter import jitter
from stillground.refinement.verdict import CLEAR, compare, judge

_ROUNDING = 1e-10


@dataclass(frozen=True)
class Climb:
    """What a climb leaves: the ladder, all reconstructions, and the finest rung's picture.

    ``model`` is the nodal field at the finest rung's pick, ``anomaly`` the root mean square of it
    less its best constant, ``mesh_change`` the local root mean square, over about a correlation
    length, of the change since the rung before (NaN with a single rung). ``interrupted``: the user
    broke off; finer rungs may be missing and the last one not iterated to its end.
    """

    ladder: Ladder
    rungs: tuple[Reconstruction, ...]
    model: Array
    anomaly: float
    mesh_change: Array
    interrupted: bool

    @property
    def finest(self) -> Reconstruction:
        return self.rungs[-1]


def climb(
    assemble: Callable[[Grid], Measurement],
    grids: Sequence[Grid],
    method: Method,
    tolerance: float,
    regularity: float | None = None,
) -> Generator[Progress, None, Climb]:
    """Reconstructs on every rung, coarse to fine, and judges how the answer moves.

    Parameters
    ----------
    assemble : callable
        From a grid to the measurement on it.
    grids : sequence of Grid
        Nested, coarse to fine.
    method : Method
    tolerance : float
        Relative change that counts as none.
    regularity : float or None
        Of the data as functionals of the ground, as in `stillground.protocols.Kind`; without it no order
        is expected.

    Yields
    ------
    Progress

    Returns
    -------
    Climb
    """
    rungs: list[Reconstruction] = []
    interrupted = False
    for number, grid in enumerate(grids, start=1):
        spacing = " by ".join(f"{h:g}" for h in dict.fromkeys(grid.spacing))
        stage = f"rung {number} of {len(grids)}, {spacing} m"
        try:
            rungs.append(
                (yield from staged(reconstruct(assemble(grid), grid, method, breakable=True), stage))
            )
        except KeyboardInterrupt:
            # Too early on this rung to judge anything: the ones before stand.
            if not rungs:
                raise
            interrupted = True
        interrupted = interrupted or rungs[-1].run.interrupted
        if interrupted:
            break

    finest = rungs[-1]
    fine = finest.grid
    stop = finest.stop(method.choose)
    models = [rung.model(stop) for rung in rungs]
    model = models[-1]
    spread = fine.norm(model - fine.mean(model))
    # Rounding alone is no anomaly: the picture is then the background.
    floor = _ROUNDING * fine.norm(model)
    spread = spread if spread > floor else 0.0

    def relative(difference: Array, grid: Grid) -> float:
        size = grid.norm(difference)
        return size / spread if spread > 0 else float(size > floor)

    # Each change is measured on the finer grid of its own pair: between the nodes of a coarser rung a
    # difference is a row of arches, which the quadrature of one grid for all would see now better, now
    # worse, and the observed order with it.
    moved = [
        models[i + 1] - prolong(models[i], before.grid, after.grid)
        for i, (before, after) in enumerate(pairwise(rungs))
    ]
    change = tuple(relative(m, rung.grid) for m, rung in zip(moved, rungs[1:], strict=True))
    drift = None
    if len(rungs) > 1 and all(rung.picks[method.choose].iteration is not None for rung in rungs[-2:]):
        drift = relative(finest.model(rungs[-2].stop(method.choose)) - model, fine)
    shaken: float | None = None
    if len(rungs) > 2 and spread > 0:
        try:
            shaken = relative((yield from staged(jitter(finest, stop), "what rounding alone changes")), fine)
        except KeyboardInterrupt:
            interrupted = True
    expected = None if regularity is None else expected_order(method.smoothness, regularity)
    rough = None if regularity is None else rough_limit(method.smoothness, regularity)
    if not fine.weighted:
        expected, rough = 0.0, WITHOUT_WEIGHTS
    verdict = judge(change, drift, tolerance, expected=expected, rough=rough, jitter=shaken or 0.0)
    sizes = [
        rung.grid.norm(m - rung.grid.mean(m)) / float(np.sqrt(np.prod(rung.grid.lengths)))
        for rung, m in zip(rungs, models, strict=True)
    ]
    blur = max(CLEAR * (shaken or 0.0) * sizes[-1], floor / float(np.sqrt(np.prod(fine.lengths))))
    index = grid_index(sizes, [max(rung.grid.spacing) for rung in rungs], blur)
    ladder = Ladder(
        rungs=tuple(
            Rung(rung.grid.spacing, rung.grid.axes, m, rung.picks[method.choose].iteration)
            for rung, m in zip(rungs, models, strict=True)
        ),
        change=change,
        pick_drift=drift,
        jitter=shaken,
        verdict=verdict,
        index=index,
        notes=compare(verdict, index, tolerance),
    )
    local = np.full(fine.shape, np.nan)
    if moved:
        # Node by node the change would show the coarser rung's nodes and not the ground; and rounding alone,
        # of a picture without an anomaly, is no change at all.
        seen = moved[-1] if change[-1] > 0 else np.zeros(fine.shape)
        local = np.sqrt(fine.local_mean(np.square(seen), method.correlation))
    return Climb(
        ladder=ladder,
        rungs=tuple(rungs),
        interrupted=interrupted,
        model=model,
        anomaly=spread / float(np.sqrt(np.prod(fine.lengths))),
        mesh_change=local,
    )
