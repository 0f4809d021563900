"""What memory a run will take, told before any of it is asked for."""

from __future__ import annotations

import math
from collections.abc import Sequence

import psutil

from stillground.errors import CapacityError
from stillground.grid import Grid
from stillground.solve.run import KEPT_BYTES, n_probes

SNAPSHOT_VALUES = 16_000_000
"""Values in all pictures of a history; where the kept iterates have more they are thinned."""

# Arrays of the finest rung's size that were seen alive at the peak: for each column that is iterated,
# and beside them.
_PER_COLUMN, _BESIDE = 6, 24


def memory(grids: Sequence[Grid], n_data: int, iterations: int) -> int:
    """Predicted peak of a climb, bytes: within some 20 % where the grid is what fills the memory."""
    columns = 1 + n_probes(n_data)
    finest = 8 * grids[-1].n_nodes
    kept = [min(KEPT_BYTES, 8 * grid.n_nodes * (iterations + 1)) for grid in grids]
    pictures = min(kept[-1], 8 * SNAPSHOT_VALUES)
    data_side = 8 * n_data * iterations * (2 * columns + 1)
    return sum(kept) + pictures + data_side + finest * (_PER_COLUMN * columns + _BESIDE)


def refuse_too_large(profile: str, grids: Sequence[Grid], n_data: int, iterations: int) -> None:
    """Raises `CapacityError` when a climb needs more memory than the machine has free."""
    need = memory(grids, n_data, iterations)
    free = psutil.virtual_memory().available
    if need > free:
        shape = " by ".join(str(n) for n in grids[-1].shape)
        factor = (need / free) ** (1 / len(grids[-1].shape))
        spacing = _round_up(max(grids[-1].spacing) * factor * 1.05)
        raise CapacityError(
            f"profile {profile}: the finest rung of {shape} nodes needs about {need / 2**30:.3g} GiB, "
            f"this machine has {free / 2**30:.3g} GiB free; take ground.spacing of {spacing} m or more, "
            f"or a smaller margin or depth"
        )


def _round_up(value: float) -> str:
    step = 10.0 ** (math.floor(math.log10(value)) - 1)
    return f"{math.ceil(value / step) * step:g}"
