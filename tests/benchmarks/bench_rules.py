"""What each stopping rule costs on twins: error at its stop over that of the best iterate.

    python -m tests.benchmarks.bench_rules [twins]

Twins are so many (20) in each family and noise level: a crosshole survey of 25 by 25 rays, grounds drawn and
measured on nodes 0.25 m apart and reconstructed on nodes 0.5 m apart.
"""

from __future__ import annotations

import sys
import time
from collections.abc import Callable
from dataclasses import replace

import numpy as np

from stillground import plugins
from stillground.grid import Grid
from stillground.operators.straight_rays import StraightRays
from stillground.progress import finish
from stillground.protocols import Array, Measurement, RuleOptions
from stillground.reconstruct import Method, judge, prepare
from stillground.rehearsal import rehearse
from stillground.rehearsal.families import layered_grounds, prior_grounds
from stillground.solve import back, iterate

CORRELATION = (4.0, 2.0)
LEVELS = (8.0, 4.0, 2.0)
COARSE = Grid((-1.0, -27.0), (0.5, 0.5), (45, 57))
RULES = {plugin.name: plugins.rule(plugin.name) for plugin in plugins.registered("rules")}
METHOD = Method(
    correlation=CORRELATION,
    smoothness=2.0,
    solver=plugins.solver("lsqr"),
    iterations=60,
    rules=RULES,
    choose="gcv",
    background=0.0,
)
# Rules with other numbers than the default ones, and what they are called in the tables.
WARY = replace(METHOD, options=RuleOptions(gcv_factor=1.4))
DISTRUST = replace(METHOD, trust=False)


def survey(grid: Grid, error: float = 1.0) -> Measurement:
    """25 sources and receivers between boreholes 20 m apart."""
    depths = np.linspace(-25.5, -0.5, 25)
    source, receiver = (g.ravel() for g in np.meshgrid(depths, depths, indexing="ij"))
    zeros, numbers = np.zeros(625), np.arange(25)
    rays = StraightRays(grid, np.column_stack([zeros, source]), np.column_stack([zeros + 20.0, receiver]))
    groupings = {"source": np.repeat(numbers, 25), "receiver": np.tile(numbers, 25)}
    return Measurement(rays, zeros, np.full(625, error), groupings)


def blobs(grid: Grid, n: int, random: np.random.Generator) -> Array:
    """Six Gaussian bodies each, shape (n_nodes, n)."""
    x, z = np.meshgrid(*grid.axes, indexing="ij")
    grounds = np.zeros((*grid.shape, n))
    for j in range(n):
        for _ in range(6):
            at = random.uniform((0, -26), (20, 0))
            wide, high = random.uniform(1.0, 3.0, 2)
            body = np.exp(-0.5 * ((x - at[0]) / wide) ** 2 - 0.5 * ((z - at[1]) / high) ** 2)
            grounds[..., j] += random.standard_normal() * body
    return grounds.reshape(-1, n)


FAMILIES: dict[str, Callable[[Grid, int, np.random.Generator], Array]] = {
    "prior": lambda grid, n, random: prior_grounds(grid, CORRELATION, 2.0, n, random),
    "rough": lambda grid, n, random: prior_grounds(grid, CORRELATION, 1.0, n, random),
    "blobs": blobs,
    "layers": lambda grid, n, random: layered_grounds(grid, CORRELATION[-1], n, random),
}


def ratios(stated: float, n: int, family: str) -> dict[str, Array]:
    """By rule, over all noise levels: error over the best, with errors stated as so many of the true ones."""
    fine = COARSE.refined()
    weights = COARSE.weights()
    measurement, finer = survey(COARSE, stated), survey(fine)
    problem = prepare(measurement, COARSE, METHOD, products=10**6)
    found: dict[str, list[float]] = {}
    for level in LEVELS:
        random = np.random.default_rng([int(level), list(FAMILIES).index(family)])
        grounds = FAMILIES[family](fine, n, random)
        clean = finer.operator.matmat(grounds)
        # Each twin's own signal is so many times the noise.
        scale = level / np.sqrt(np.mean(clean**2, axis=0))
        data = (scale * clean + random.standard_normal(clean.shape)) / stated
        truths = (scale * grounds).reshape(*fine.shape, n)[::2, ::2].reshape(-1, n)
        for j, run in enumerate(finish(iterate(METHOD.solver, problem.operator, data, METHOD.iterations))):
            stops = {}
            for label, method in (("", METHOD), (" x 1.4", WARY), (" untrusted", DISTRUST)):
                picks, _ = judge(run.history, method)
                wanted = {"": RULES, " x 1.4": ("gcv",), " untrusted": ("discrepancy",)}[label]
                stops |= {name + label: picks[name].iteration for name in wanted}
            places = [run.inside(run.history.last if stop is None else stop) for stop in stops.values()]
            kept = problem.anomaly(back(run.operator, np.column_stack([*run.solutions, *places])))
            errors = np.sqrt(weights @ (kept - truths[:, j : j + 1]) ** 2)
            best = errors[: len(run.solutions)].min()
            for name, error in zip(stops, errors[len(run.solutions) :], strict=True):
                found.setdefault(name, []).append(float(error / best))
    return {name: np.array(values) for name, values in found.items()}


def table(stated: float, n: int) -> None:
    """Prints median / 90 % / worst by family, and the share of all twins over 1.5."""
    by_family = {family: ratios(stated, n, family) for family in FAMILIES}
    print(f"\nerrors stated {stated:g} of the true ones, {n} twins x {len(LEVELS)} noise levels each")
    print(f"{'rule':24}" + "".join(f"{family:>20}" for family in FAMILIES) + f"{'over 1.5':>10}")
    for rule in by_family["prior"]:
        told = [by_family[family][rule] for family in FAMILIES]
        cells = [f"{np.median(x):.2f}/{np.quantile(x, 0.9):.2f}/{x.max():.2f}" for x in told]
        share = float(np.mean(np.concatenate(told) > 1.5))
        print(f"{rule:24}" + "".join(f"{cell:>20}" for cell in cells) + f"{share:10.1%}")


def rehearsal_time() -> None:
    """Prints the time of a rehearsal of 30 twins and 60 iterations at 89 by 113 nodes."""
    grid = COARSE.refined()
    coarse, fine = (grid, survey(grid)), (grid.refined(), survey(grid.refined()))
    random = np.random.default_rng(0)
    ground = prior_grounds(grid, CORRELATION, 2.0, 1, random)[:, 0]
    data = coarse[1].operator.matvec(ground)
    data = 4.0 * data / np.sqrt(np.mean(data**2)) + random.standard_normal(625)
    coarse, fine = ((g, replace(m, data=data)) for g, m in (coarse, fine))
    for name in ("first", "second"):
        begin = time.perf_counter()
        found = finish(rehearse(coarse, fine, METHOD, twins=30, seed=0))
        print(f"\nrehearsal, {grid.n_nodes} nodes, 625 rays, 2 families of 30 twins x 60 iterations, {name}: "
              f"{time.perf_counter() - begin:.2f} s")  # fmt: skip
    print("groups of equals:", " > ".join(" = ".join(group) for group in found.groups))


if __name__ == "__main__":
    twins = int(sys.argv[1]) if len(sys.argv) > 1 else 20
    for stated in (1.0, 0.5, 2.0):
        table(stated, twins)
    rehearsal_time()
