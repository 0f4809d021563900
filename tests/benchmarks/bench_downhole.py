"""The downhole demo: time of its ladder, and how right answer, differences and bars are over many draws.

    python -m tests.benchmarks.bench_downhole [draws]

Draws (200) of the noise over the demo's described ground; the statistics of tests/test_downhole.py.
"""

from __future__ import annotations

import sys
import time

import numpy as np
from tests.test_downhole import ensemble, settings, window_errors, within

from stillground.pipeline.answer import plan_method
from stillground.pipeline.grids import plan_grids
from stillground.pipeline.linear import linear_ladder
from stillground.pipeline.profiles import read_profiles
from stillground.progress import finish
from stillground.refinement import climb


def ladder() -> None:
    config = settings()
    (profile,) = read_profiles(config)
    grids, method = plan_grids(profile, config), plan_method(config)
    assemble = finish(linear_ladder(profile, config, grids, method))
    took = []
    for _ in range(6):
        begin = time.process_time(), time.perf_counter()
        top = finish(climb(assemble, grids, method, config.refinement.tolerance, config.kind.regularity))
        took.append((time.process_time() - begin[0], time.perf_counter() - begin[1]))
    busy, wall = (min(times) for times in zip(*took[1:], strict=True))
    change = np.array(top.ladder.change)
    print(
        f"ladder of {len(grids)} rungs to {grids[-1].n_nodes} nodes, warm: {wall:.3f} s ({busy:.3f} s busy)"
    )
    print("ratios of changes", np.round(change[:-1] / change[1:], 3))


def statistics(draws: int) -> None:
    elevation, truth, answers, rehearsal, vertical = ensemble(draws)
    inside = within(elevation)
    error = np.sqrt(np.mean((1 / answers - 1 / truth[:, None])[inside] ** 2))
    for window, miss in enumerate(window_errors(elevation, truth, vertical), start=1):
        print(f"differences over {window} m: {miss:.1f} m/s")
    print(f"answer: {error:.1f} m/s over {draws} draws")
    missed = np.abs(answers - truth[:, None])[inside] / rehearsal.total_error[inside][:, None]
    one, two = (float(np.mean(missed < size)) for size in (1, 2))
    print(f"within one and two bars: {100 * one:.0f} % and {100 * two:.1f} %")


if __name__ == "__main__":
    ladder()
    statistics(int(sys.argv[1]) if len(sys.argv) > 1 else 200)
