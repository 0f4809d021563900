"""Fast marching against scikit-fmm's, second order, on the same grids; derivatives over one march.

    python -m tests.benchmarks.bench_curved_rays [rounds]

The candidates take turns in one run. Times are minima, of one thread's own processor time where it
works alone, since others may be using the processors.
"""

from __future__ import annotations

import resource
import subprocess
import sys
import time
from collections.abc import Callable

import numpy as np
import skfmm

from stillground.grid import Grid
from stillground.operators.curved_rays import TravelTimes

V0, K = 800.0, 12.0


def case(
    columns: int, rows: int, sources: int, receivers: int
) -> tuple[Grid, np.ndarray, np.ndarray, np.ndarray]:
    """A profile over v = V0 + K depth, 100 m deep, sources and receivers on the surface."""
    h = 100.0 / (rows - 1)
    grid = Grid((0.0, -100.0), (h, h), (columns, rows))
    at, to = (np.linspace(0.03, 0.97, n) * grid.lengths[0] for n in (sources, receivers))
    starts, ends = np.repeat(at, receivers), np.tile(to, sources)
    slowness = np.tile(1.0 / (V0 - K * grid.axes[1]), columns)
    return grid, *(np.column_stack([x, np.full(x.size, -0.2 * h)]) for x in (starts, ends)), slowness


def exact(starts: np.ndarray, ends: np.ndarray) -> np.ndarray:
    """Slotnick (1959)."""
    v1, v2 = V0 - K * starts[:, 1], V0 - K * ends[:, 1]
    return np.arccosh(1.0 + K**2 * ((ends - starts) ** 2).sum(axis=1) / (2.0 * v1 * v2)) / K


def minima(
    candidates: dict[str, Callable[[], object]], rounds: int, clock: Callable[[], float]
) -> dict[str, float]:
    """Least seconds of each, all taking turns; the first round only warms up."""
    least = dict.fromkeys(candidates, np.inf)
    for turn in range(rounds + 1):
        for name, work in candidates.items():
            start = clock()
            work()
            if turn:
                least[name] = min(least[name], clock() - start)
    return least


def one_source(columns: int, rows: int, goal: float, rounds: int) -> None:
    grid, _, _, slowness = case(columns, rows, 1, 2)
    x, z = np.meshgrid(*grid.axes, indexing="ij")
    h, source = grid.spacing[0], np.array([0.3 * grid.lengths[0] + 0.37 * grid.spacing[0], -30.6])
    # To receivers at every node well within the depth that rays turn at.
    nodes = np.column_stack([x.reshape(-1), z.reshape(-1)])
    distance = np.hypot(*(nodes - source).T)
    near = (distance < 60.0) & (distance > 6.0)
    starts = np.tile(source, (near.sum(), 1))
    truth = exact(starts, nodes[near])
    v = V0 - K * source[1]
    early = 10.0 * h / v
    # Fronts are circles about points that sink.
    centre, radius = source[1] - v / K * (np.cosh(K * early) - 1.0), v / K * np.sinh(K * early)
    front, speed = np.hypot(x - source[0], z - centre) - radius, 1.0 / slowness.reshape(grid.shape)
    single = TravelTimes(grid, starts[:1], nodes[near][-1:], threads=1)
    ours = np.abs(TravelTimes(grid, starts, nodes[near]).predict(slowness) / truth - 1).max()
    theirs = np.asarray(skfmm.travel_time(front, speed, dx=h, order=2)).reshape(-1)[near] + early
    theirs = np.abs(theirs / truth - 1).max()
    derivative = single.differentiate(slowness)
    change, datum = slowness[:, None] * np.ones((1, 4)), np.ones(1)
    found = minima(
        {
            "scikit-fmm, order 2": lambda: skfmm.travel_time(front, speed, dx=h, order=2),
            "march": lambda: single.predict(slowness),
            "march and ray": lambda: single.linearise(slowness),
            "exact tangent": lambda: derivative.matvec(slowness),
            "exact tangent, 4 columns": lambda: derivative.matmat(change),
            "exact adjoint": lambda: derivative.rmatvec(datum),
        },
        rounds,
        time.thread_time,
    )
    base = found["scikit-fmm, order 2"]
    print(f"\none source, {columns} x {rows} nodes, one thread")
    print(f"{'':28}{'ms':>9}{'ns a node':>11}{'over theirs':>13}{'goals':>16}")
    for name, seconds in found.items():
        goals = f"{1e3 * goal:.0f} ms, 0.70" if name == "march" else ""
        each = 1e9 * seconds / grid.n_nodes
        print(f"{name:28}{1e3 * seconds:9.2f}{each:11.0f}{seconds / base:13.2f}{goals:>16}")
    print(f"largest relative error: {ours:.1e}, theirs {theirs:.1e}: {theirs / ours:.0f} times (goal: 10)")


def survey(rounds: int) -> None:
    grid, starts, ends, slowness = case(401, 101, 13, 48)
    one, two = (TravelTimes(grid, starts, ends, threads=threads) for threads in (1, 2))
    found = minima(
        {
            "times, 1 thread": lambda: one.predict(slowness),
            "times, 2 threads": lambda: two.predict(slowness),
            "times and rays, 1 thread": lambda: one.linearise(slowness),
            "times and rays, 2 threads": lambda: two.linearise(slowness),
        },
        rounds,
        time.perf_counter,
    )
    print(f"\n13 sources, 48 receivers, {grid.shape[0]} x {grid.shape[1]} nodes")
    for name, seconds in found.items():
        print(f"{name:28}{1e3 * seconds:9.2f} ms")


def memory(way: str) -> None:
    """Run in a process of its own: the most that 100 sources hold at once."""
    grid, starts, ends, slowness = case(1000, 400, 100, 101)
    times = TravelTimes(grid, starts, ends)
    operator = getattr(times, way)(slowness)
    if way == "differentiate":
        operator.rmatvec(operator.matvec(slowness))
    print(resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * 1024)


def main(rounds: int = 7) -> None:
    one_source(401, 201, 0.010, rounds)
    one_source(1001, 401, 0.055, rounds)
    survey(rounds)
    print("\n100 sources, 101 receivers, 1000 x 400 nodes: most memory of a process (goal: 2.00 GiB)")
    for way in ("linearise", "differentiate"):
        command = [
            sys.executable,
            "-c",
            f"from tests.benchmarks.bench_curved_rays import memory; memory({way!r})",
        ]
        done = subprocess.run(command, capture_output=True, text=True, check=True)
        print(f"{way:28}{int(done.stdout) / 2**30:9.2f} GiB")


if __name__ == "__main__":
    main(*map(int, sys.argv[1:]))
