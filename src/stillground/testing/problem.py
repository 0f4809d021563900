"""A small problem in standard form that every solver should make progress on."""

from __future__ import annotations

import numpy as np
from pylops import LinearOperator

from stillground.grid import Grid
from stillground.operators.prior_root import PriorRoot
from stillground.operators.straight_rays import StraightRays
from stillground.protocols import Array, Measurement
from stillground.standard_form import standard_form


def small_problem(seed: int = 0) -> tuple[LinearOperator, Array]:
    """64 rays over 9 by 11 nodes with one error of noise: (operator, b), it offers row blocks."""
    random = np.random.default_rng(seed)
    grid = Grid((0.0, 0.0), (1.0, 1.0), (9, 11))
    depths = np.linspace(1.0, 9.0, 8)
    source, receiver = (g.ravel() for g in np.meshgrid(depths, depths, indexing="ij"))
    zeros = np.zeros(64)
    rays = StraightRays(grid, np.column_stack([zeros, source]), np.column_stack([zeros + 8.0, receiver]))
    root = PriorRoot(grid, (3.0, 2.0), 2.0)
    truth = root.matvec(random.standard_normal(grid.n_nodes))
    errors = np.full(64, 0.5)
    data = rays.matvec(truth) + errors * random.standard_normal(64)
    numbers = np.arange(8)
    groupings = {"source": np.repeat(numbers, 8), "receiver": np.tile(numbers, 8)}
    measurement = Measurement(rays, data, errors, groupings)
    form = standard_form(measurement, root, np.zeros(grid.n_nodes))
    return form.operator, form.b
