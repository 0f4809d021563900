"""Size and time of a map through three crossing lines, against a plain array of the same values.

    python -m tests.benchmarks.bench_map

A map of 20 slices of some 400 by 400 nodes, a tenth of them within reach of a line; the goal is at most
1 MB. The sections are noise with the correlation of a prior of smoothness 2.
"""

from __future__ import annotations

import tempfile
import time
from dataclasses import replace
from pathlib import Path

import numpy as np
from tests.products.crossing_lines import PROVENANCE, crossing_lines, unit
from tests.products.made_up_results import make_result

from stillground.grid import Grid
from stillground.operators.prior_root import PriorRoot
from stillground.products.map import Slicing, map_dataset, write_map

SLICING = Slicing(spacing=1.0, levels=tuple(np.arange(1.0, 21.0)), reach=7.2)


def main() -> None:
    grid = Grid((-5.0, 30.0), (1.0, 0.5), (401, 69))
    result = make_result(argued=False)
    root = PriorRoot(grid, (10.0, 4.0), 2.0)
    anomaly = root @ np.random.default_rng(5).standard_normal(root.shape[1])
    anomaly = (anomaly / np.abs(anomaly).max()).reshape(grid.shape)
    flat = np.ones(grid.shape)
    result = replace(
        result,
        axes=grid.axes,
        model=(1 + 0.2 * anomaly) / 1800,
        background=flat / 1800,
        mesh_change=1e-6 * flat,
        noise_part=(1 + 0.5 * anomaly) * 1e-5,
        coverage=replace(result.coverage, values=flat),
    )
    lines = crossing_lines(result, "EPSG:32631", first=0.0, last=385.0, surface=None)
    crs, _ = unit("EPSG:32631")
    begin = time.perf_counter()
    dataset = map_dataset(lines, SLICING, crs=crs, provenance=PROVENANCE)
    made = time.perf_counter()
    with tempfile.TemporaryDirectory() as folder:
        paths = write_map(Path(folder), dataset)
        written = time.perf_counter()
        sizes = {path.name: path.stat().st_size for path in paths}
    shape = dataset["slowness"].shape
    share = float(dataset["slowness"].notnull().mean())
    plain = 4 * dataset["slowness"].size
    print(f"{shape[0]} by {shape[1]} by {shape[2]}, {100 * share:.1f} % filled")
    print(f"made in {made - begin:.2f} s, {len(paths)} files written in {written - made:.2f} s")
    for name, size in sizes.items():
        print(f"{name:28s} {size / 1e6:6.3f} MB, {plain / size:6.1f} times less than one plain array")


if __name__ == "__main__":
    main()
