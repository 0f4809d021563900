"""Matrix-free straight rays against the same bilinear matrix in compressed rows.

    python -m tests.benchmarks.bench_straight_rays [intervals] [sources] [rounds]

Ratios come from one run with the candidates taking turns, medians of all rounds. Memory is the peak
of one product beyond its result, over the bytes of the matrix.
"""

from __future__ import annotations

import sys
import time
import tracemalloc
from collections.abc import Callable

import numpy as np
import scipy.sparse as sp

from stillground.grid import Grid
from stillground.operators.straight_rays import StraightRays

GOALS = {
    "forward, 1 thread": 0.60,
    "forward, 2 threads": 0.35,
    "adjoint, 1 thread": 1.10,
    "adjoint, 2 threads": 0.60,
    "forward, memory": 0.03,
    "adjoint, memory": 0.03,
}


def crosshole(grid: Grid, sources: int) -> tuple[np.ndarray, np.ndarray]:
    x, z = grid.axes
    depths = np.linspace(z[0] + 0.02 * grid.lengths[1], z[-1] - 0.02 * grid.lengths[1], sources)
    n = sources**2
    starts = np.column_stack([np.full(n, x[0] + 0.5), np.repeat(depths, sources)])
    return starts, np.column_stack([np.full(n, x[-1] - 0.5), np.tile(depths, sources)])


def compressed_rows(grid: Grid, starts: np.ndarray, ends: np.ndarray) -> sp.csr_matrix:
    """The exact matrix, two Gauss points between every two grid lines."""
    points, weights = np.polynomial.legendre.leggauss(2)
    points, weights = (points + 1) / 2, weights / 2
    origin, spacing, top = np.array(grid.origin), np.array(grid.spacing), np.array(grid.shape) - 2
    counts, columns, values = [0], [], []
    for a, b in zip((starts - origin) / spacing, (ends - origin) / spacing, strict=True):
        cuts = [np.array([0.0, 1.0])]
        for axis in range(2):
            low, high = sorted((a[axis], b[axis]))
            if low < high:
                cuts.append((np.arange(np.ceil(low), np.floor(high) + 1) - a[axis]) / (b[axis] - a[axis]))
        t = np.unique(np.clip(np.concatenate(cuts), 0, 1))
        place = a + (t[:-1, None] + np.diff(t)[:, None] * points)[..., None] * (b - a)
        cell = np.clip((a + 0.5 * (t[1:] + t[:-1])[:, None] * (b - a)).astype(int), 0, top)
        u, v = np.moveaxis(place - cell[:, None], -1, 0)
        share = weights * np.diff(t)[:, None] * np.linalg.norm((b - a) * spacing)
        first = cell[:, 0] * grid.shape[1] + cell[:, 1]
        node = np.concatenate([first, first + 1, first + grid.shape[1], first + grid.shape[1] + 1])
        corners = [(1 - u) * (1 - v), (1 - u) * v, u * (1 - v), u * v]
        nodes, where = np.unique(node, return_inverse=True)
        counts.append(nodes.size)
        columns.append(nodes.astype(np.int32))
        values.append(np.bincount(where, np.concatenate([(share * c).sum(axis=1) for c in corners])))
    rows = np.cumsum(counts).astype(np.int32)
    shape = (len(starts), grid.n_nodes)
    return sp.csr_matrix((np.concatenate(values), np.concatenate(columns), rows), shape=shape)


def medians(candidates: dict[str, Callable[[], object]], rounds: int) -> dict[str, float]:
    """Median seconds of each, all taking turns; the first round only warms up."""
    seconds: dict[str, list[float]] = {name: [] for name in candidates}
    for turn in range(rounds + 1):
        for name, work in candidates.items():
            start = time.perf_counter()
            work()
            if turn:
                seconds[name].append(time.perf_counter() - start)
    return {name: float(np.median(all_)) for name, all_ in seconds.items()}


def processors(work: Callable[[], object], rounds: int) -> float:
    """How many processors the work had: below 2 with two threads, others were using them."""
    busy, passed = time.process_time(), time.perf_counter()
    for _ in range(rounds):
        work()
    return (time.process_time() - busy) / (time.perf_counter() - passed)


def peak(work: Callable[[], np.ndarray]) -> int:
    """Largest number of bytes that one call holds beyond its result."""
    tracemalloc.start()
    result = work()
    held = tracemalloc.get_traced_memory()[1] - result.nbytes
    tracemalloc.stop()
    return held


def main(intervals: int = 512, sources: int = 150, rounds: int = 15) -> None:
    grid = Grid((0.0, 0.0), (0.05, 0.05), (intervals + 1, intervals + 1))
    starts, ends = crosshole(grid, sources)
    matrix = compressed_rows(grid, starts, ends)
    transposed = matrix.T
    size = matrix.data.nbytes + matrix.indices.nbytes + matrix.indptr.nbytes
    one, two = (StraightRays(grid, starts, ends, threads=threads) for threads in (1, 2))
    rng = np.random.default_rng(0)
    x, y = rng.normal(size=(grid.n_nodes, 3)), rng.normal(size=(len(starts), 3))
    x1, y1 = x[:, 0].copy(), y[:, 0].copy()
    x2, y2 = x[:, :2].copy(), y[:, :2].copy()

    print(f"{grid.shape[0]} x {grid.shape[1]} nodes, {len(starts):,} rays, {matrix.nnz / 1e6:.1f} M entries")
    print(f"matrix {size / 1e6:.0f} MB, model {x1.nbytes / 1e6:.1f} MB, data {y1.nbytes / 1e6:.2f} MB")
    error = np.abs(matrix @ x1 - one @ x1).max() / (grid.lengths[0] * np.abs(x1).max())
    print(f"largest difference over length times largest value: {error:.1e}")

    found = medians(
        {
            "forward, matrix": lambda: matrix @ x1,
            "forward, 1 thread": lambda: one.matvec(x1),
            "forward, 2 threads": lambda: two.matvec(x1),
            "forward, 2 columns": lambda: one.matmat(x2),
            "forward, 3 columns": lambda: one.matmat(x),
            "adjoint, matrix": lambda: transposed @ y1,
            "adjoint, 1 thread": lambda: one.rmatvec(y1),
            "adjoint, 2 threads": lambda: two.rmatvec(y1),
            "adjoint, 2 columns": lambda: one.rmatmat(y2),
            "adjoint, 3 columns": lambda: one.rmatmat(y),
        },
        rounds,
    )
    print(f"\n{'':24}{'ms':>9}{'over':>22}{'ratio':>9}{'goal':>8}")
    for way in ("forward", "adjoint"):
        print(f"{way + ', matrix':24}{1e3 * found[way + ', matrix']:9.2f}")
        for kind, base in (
            ("1 thread", "matrix"),
            ("2 threads", "matrix"),
            ("2 columns", "1 thread"),
            ("3 columns", "1 thread"),
        ):
            name = f"{way}, {kind}"
            ratio = found[name] / found[f"{way}, {base}"]
            goal = f"{GOALS[name]:8.2f}" if name in GOALS else ""
            print(f"{name:24}{1e3 * found[name]:9.2f}{base:>22}{ratio:9.2f}{goal}")
    print(f"two threads had {processors(lambda: two.matvec(x1), rounds):.1f} processors")
    print(f"\n{'':24}{'MB':>9}{'over':>22}{'ratio':>9}{'goal':>8}")
    for name, held in (
        ("forward, memory", peak(lambda: two.matvec(x1))),
        ("adjoint, memory", peak(lambda: two.rmatvec(y1))),
    ):
        print(f"{name:24}{held / 1e6:9.2f}{'matrix':>22}{held / size:9.3f}{GOALS[name]:8.2f}")


if __name__ == "__main__":
    main(*map(int, sys.argv[1:]))
