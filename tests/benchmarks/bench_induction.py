"""Readings at low induction number: seconds of a reconstruction, and products against a sparse matrix.

    python -m tests.benchmarks.bench_induction [stations] [rounds]

Ratios come from one run with the candidates taking turns, medians of all rounds.
"""

from __future__ import annotations

import sys
import time

import numpy as np
import scipy.sparse as sp
from tests.benchmarks.bench_straight_rays import medians

from stillground.grid import Grid, ladder
from stillground.ground import Blob, Ground, Layer
from stillground.operators.ground_conductivity import GroundConductivity
from stillground.operators.prior_root import PriorRoot
from stillground.progress import finish
from stillground.protocols import Measurement
from stillground.reconstruct import Method, reconstruct
from stillground.refinement import climb
from stillground.solve.lsqr import lsqr
from stillground.stopping.gcv import gcv

GROUND = Ground(0.03, (Layer(-0.015, -1.5, 9.0), Blob(-0.02, (90.0, -3.5), (12.0, 1.2))))
GOALS = {"one grid": 0.5, "ladder": 5.0}


def main(stations: int = 200, rounds: int = 9) -> None:
    n = 6 * stations
    along = np.repeat(np.arange(float(stations)), 6)
    spacing, vertical = np.tile([1.0, 2.0, 4.0], 2 * stations), np.tile([True] * 3 + [False] * 3, stations)
    flat = np.zeros(n)

    def operator(grid: Grid) -> GroundConductivity:
        return GroundConductivity(grid, along, flat, flat, spacing, vertical)

    def grids(step: float, levels: int) -> tuple[Grid, ...]:
        return ladder((-4.0, -13.0), (stations + 3.0, 0.0), (2 * step, step), levels)

    finest = grids(0.09, 1)[0]
    points = np.stack(np.meshgrid(*finest.axes, indexing="ij"), axis=-1).reshape(-1, 2)
    clean = operator(finest) @ GROUND.values(points)
    data = clean * (1 + 0.02 * np.random.default_rng(0).standard_normal(n))

    def assemble(grid: Grid) -> Measurement:
        return Measurement(operator(grid), data, 0.02 * clean)

    method = Method((16.0, 2.0), 2.0, lsqr, 40, {"gcv": gcv}, "gcv")
    single = grids(0.32, 1)[0]
    steps = grids(0.09, 4)
    finish(reconstruct(assemble(single), single, method))
    for name, nodes, work in (
        ("one grid", single.n_nodes, lambda: finish(reconstruct(assemble(single), single, method))),
        ("ladder", steps[-1].n_nodes, lambda: finish(climb(assemble, steps, method, 0.02))),
    ):
        begin = time.perf_counter()
        work()
        took = time.perf_counter() - begin
        print(f"{name:10}{nodes:9,} nodes{took:8.2f} s, goal {GOALS[name]} s")

    A = operator(steps[-1])
    matrix = sp.csr_matrix(sp.vstack([sp.csr_matrix(A.rmatvec(row)) for row in np.eye(n)]))
    transposed = sp.csr_matrix(matrix.T)
    root = PriorRoot(steps[-1], (16.0, 2.0), 2.0)
    rng = np.random.default_rng(1)
    x, y = rng.normal(size=(A.shape[1], 2)), rng.normal(size=(n, 2))
    found = medians(
        {
            "forward, matrix": lambda: matrix @ x,
            "forward": lambda: A.matmat(x),
            "adjoint, matrix": lambda: transposed @ y,
            "adjoint": lambda: A.rmatmat(y),
            "prior root": lambda: root.matmat(x),
        },
        rounds,
    )
    print(f"\n{n} readings x {A.shape[1]:,} nodes, two columns; matrix of {matrix.nnz / 1e6:.2f} M entries")
    for name, seconds in found.items():
        base = found.get(f"{name}, matrix")
        ratio = "" if base is None else f"{seconds / base:8.2f} of the matrix"
        print(f"{name:18}{1e3 * seconds:8.2f} ms{ratio}")


if __name__ == "__main__":
    main(*map(int, sys.argv[1:]))
