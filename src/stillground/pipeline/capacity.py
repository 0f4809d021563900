"""What memory a run will take, told before any of it is asked for."""

from __future__ import annotations

import math
from collections.abc import Sequence

import psutil

from stillground import plugins
from stillground.config import Config
from stillground.errors import CapacityError
from stillground.grid import Grid
from stillground.reconstruct import takes_data_space
from stillground.solve.gram import BATCH
from stillground.solve.run import KEPT_BYTES, n_probes

SNAPSHOT_VALUES = 16_000_000
"""Values in all pictures of a history; where the kept iterates have more they are thinned."""

# Arrays of the finest rung's size that were seen alive at the peak: for each column that is iterated,
# for each row while rows are made, and beside them.
_PER_COLUMN, _PER_ROW, _BESIDE = 6, 4, 24


def memory(grids: Sequence[Grid], n_data: int, iterations: int, *, rows: bool = False) -> int:
    """Predicted peak of a climb, bytes: within some 20 % where the grid is what fills the memory.

    ``rows``: the solver holds all rows on the grid, see `rows_on_grid`.
    """
    columns = 1 + n_probes(n_data)
    finest = 8 * grids[-1].n_nodes
    kept = [min(KEPT_BYTES, 8 * grid.n_nodes * (iterations + 1)) for grid in grids]
    pictures = min(kept[-1], 8 * SNAPSHOT_VALUES)
    data_side = 8 * n_data * iterations * (2 * columns + 1)
    at_work = _PER_COLUMN * columns
    if rows:
        at_work = n_data + max(at_work, _PER_ROW * BATCH)
    return sum(kept) + pictures + data_side + finest * (at_work + _BESIDE)


def rows_on_grid(config: Config, n_data: int) -> bool:
    """Whether the solver asked for holds a matrix of n_data by the unknowns of the grid."""
    products = config.solver.iterations * (1 + n_probes(n_data))
    return plugins.holds_rows(config.solver.method) and not takes_data_space(
        n_data, products, config.ground.bounds
    )


def refuse_too_large(profile: str, grids: Sequence[Grid], n_data: int, config: Config) -> None:
    """Raises `CapacityError` when a climb needs more memory than the machine has free."""
    rows = rows_on_grid(config, n_data)
    need = memory(grids, n_data, config.solver.iterations, rows=rows)
    free = psutil.virtual_memory().available
    if need > free:
        shape = " by ".join(str(n) for n in grids[-1].shape)
        factor = (need / free) ** (1 / len(grids[-1].shape))
        spacing = _round_up(max(grids[-1].spacing) * factor * 1.05)
        method = f"; {config.solver.method} holds all rows, block-kaczmarz does not" if rows else ""
        raise CapacityError(
            f"profile {profile}: the finest rung of {shape} nodes needs about {need / 2**30:.3g} GiB, "
            f"this machine has {free / 2**30:.3g} GiB free; take ground.spacing of {spacing} m or more, "
            f"or a smaller margin or depth{method}"
        )


def _round_up(value: float) -> str:
    step = 10.0 ** (math.floor(math.log10(value)) - 1)
    return f"{math.ceil(value / step) * step:g}"
