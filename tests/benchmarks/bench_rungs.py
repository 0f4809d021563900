"""How error bars settle from rung to rung: their changes at equal iteration, and by what these shrink.

    python -m tests.benchmarks.bench_rungs [twins]

The survey is that of `bench_rules`, on five nested grids from 2 m to 0.125 m; twins (30) are the same grounds
on all of them, drawn and measured on the finest, which is left out of the table.
"""

from __future__ import annotations

import sys
from dataclasses import replace
from itertools import pairwise

import numpy as np
from tests.benchmarks.bench_rules import CORRELATION, METHOD, survey

from stillground.grid import ladder, prolong
from stillground.progress import finish
from stillground.protocols import Array, History, Pick, RuleOptions
from stillground.reconstruct import reconstruct
from stillground.rehearsal import rehearse
from stillground.rehearsal.families import prior_grounds
from stillground.uncertainty import noise_part

STOP = 10.0


def fixed(history: History, options: RuleOptions) -> Pick:
    """The same iteration on every grid."""
    return Pick(STOP, True, "fixed")


def main(twins: int) -> None:
    """Prints, by map, the relative L2 change from rung to rung and the ratios of successive changes."""
    *grids, finest = ladder((-1.0, -27.0), (21.0, 1.0), (0.125, 0.125), 5)
    method = replace(METHOD, rules={"fixed": fixed}, choose="fixed", iterations=int(STOP) + 2)
    random = np.random.default_rng(0)
    exact = survey(finest)
    data = exact.operator.matvec(prior_grounds(finest, CORRELATION, 2.0, 1, random)[:, 0])
    data = 4.0 * data / np.sqrt(np.mean(data**2)) + random.standard_normal(data.size)
    source = (finest, replace(exact, data=data))
    maps: dict[str, list[Array]] = {
        "answer": [],
        "noise part": [],
        "total error": [],
        "resolved fraction": [],
    }
    for grid in grids:
        measurement = replace(survey(grid), data=data)
        found = finish(reconstruct(measurement, grid, method))
        rehearsal = finish(rehearse((grid, measurement), source, method, twins=twins, seed=0))
        maps["answer"].append(found.model(STOP))
        maps["noise part"].append(finish(noise_part(found, STOP, members=32, seed=0)))
        maps["total error"].append(rehearsal.total_error)
        maps["resolved fraction"].append(rehearsal.resolved)
    spacings = " > ".join(f"{grid.spacing[0]:g}" for grid in grids)
    print(f"iteration {STOP:g}, {twins} twins, spacings {spacings} m")
    for name, fields in maps.items():
        size = grids[-1].norm(fields[-1])
        changes = [
            fine.norm(after - prolong(before, coarse, fine)) / size
            for (coarse, before), (fine, after) in pairwise(zip(grids, fields, strict=True))
        ]
        ratios = ", ".join(f"{one / other:.1f}" for one, other in pairwise(changes))
        print(f"{name:18} changes {', '.join(f'{c:.2g}' for c in changes)}; shrink by {ratios}")


if __name__ == "__main__":
    main(int(sys.argv[1]) if len(sys.argv) > 1 else 30)
