"""What `inspect` says that runs will take, over what they take: of the demos, whose ground is invented.

    python -m tests.benchmarks.bench_plans

Each is planned and run twice in one process; the second time counts, since the first includes compiling.
"""

from __future__ import annotations

import tempfile
import time
from pathlib import Path

from stillground.config import load
from stillground.pipeline.inspect import inspect
from stillground.pipeline.run import run
from stillground.progress import finish


def ratio(path: Path, folder: Path) -> str:
    """Seconds planned, seconds taken, and the one over the other, the second time."""
    config, text = load(path)
    for _ in range(2):
        planned = sum(sum(plan.seconds.values()) for plan in inspect(config))
        began = time.perf_counter()
        finish(run(config, text, folder))
        taken = time.perf_counter() - began
    return f"{path.stem:24} planned {planned:5.1f} s, taken {taken:5.1f} s: {planned / taken:.2f}"


if __name__ == "__main__":
    with tempfile.TemporaryDirectory() as made:
        for path in sorted(Path("configs").glob("*.toml")):
            print(ratio(path, Path(made) / path.stem), flush=True)
