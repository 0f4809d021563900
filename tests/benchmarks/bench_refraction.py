"""The refraction line as a whole: grids, outliers and misstated errors over draws of the noise, and time.

    python -m tests.benchmarks.bench_refraction [draws]

Errors are root mean square, of log slowness, in the half of the ground with most ray. The commands take
turns; their time is the least of three, with loading Python and the products.
"""

from __future__ import annotations

import subprocess
import sys
import tempfile
import time
from pathlib import Path

import numpy as np
from tests.refraction_twin import CONFIG, Twin, twin

COMMAND = (sys.executable, "-m", "stillground")
LONG = """
[simulate.sources]
first = ["0 m", "0 m", "200 m"]
last = ["192 m", "0 m", "200 m"]
count = 25
[simulate.receivers]
first = ["0 m", "0 m", "200 m"]
last = ["190 m", "0 m", "200 m"]
count = 96
"""


def told(name: str, found: Twin, clean: Twin) -> tuple[float, ...]:
    """Prints a line of one twin, and gives what is looked at over all draws."""
    ladder, grid = found.top.ladder, found.top.finest.grid
    moved = found.top.anomaly * np.array(ladder.change)
    error = found.error(found.top.model, clean.lit)
    over = error / clean.error(clean.top.model, clean.lit)
    steps = found.linear.outer[grid].steps
    changes = ", ".join(f"{each:.4f}" for each in moved)
    print(
        f"{name:22} {ladder.verdict.word:9} changes {changes} (ratio {moved[0] / moved[1]:.1f}); "
        f"misfit {steps.misfits[-1]:.3g} in {len(steps.targets)}; error {error:.3f}, {over:.2f} of clean",
        flush=True,
    )
    return float(moved[0] / moved[1]), float(moved[1]), over


def draws(number: int) -> None:
    clean, wild = [], []
    for seed in range(number):
        plain = twin(seed=seed)
        if seed == 0:
            print(f"error of the start: {plain.error(plain.measurement.start, plain.lit):.3f}")
        clean.append(told(f"draw {seed}", plain, plain))
        wild.append(told("  10 % of picks wild", twin(seed=seed, wild=0.1), plain))
        if seed == 0:
            told("  errors stated half", twin(seed=seed, stated=0.5), plain)
            told("  errors stated double", twin(seed=seed, stated=2.0), plain)
            told("  white prior", twin("ground.smoothness=0", seed=seed), plain)
    ratio, second, _ = np.median(clean, axis=0)
    print(f"median ratio of changes {ratio:.1f} (goal: 2), second change {second:.4f} (goal: 0.01)")
    print(f"wild picks cost at most {100 * (np.max(wild, axis=0)[2] - 1):.1f} % (goal: 5 %)")


def seconds(config: Path, folder: Path) -> float:
    command = [*COMMAND, "run", str(config), "--quiet", "--out", str(folder / "out")]
    begin = time.perf_counter()
    subprocess.run(command, check=True, capture_output=True)
    return time.perf_counter() - begin


def commands() -> None:
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        long = folder / "long.toml"
        text = CONFIG.read_text(encoding="utf-8").replace("../datasets/osmere-weir/", "")
        long.write_text(text + LONG, encoding="utf-8")
        done = subprocess.run([*COMMAND, "simulate", str(long)], capture_output=True, text=True)
        assert done.returncode == 0, done.stderr
        least = {CONFIG: np.inf, long: np.inf}
        for _ in range(3):
            for config in least:
                least[config] = min(least[config], seconds(config, folder))
    short, whole = least.values()
    print(f"whole run, 48 geophones and 13 shots: {short:.2f} s (goal: 6)")
    print(f"whole run, 96 geophones and 25 shots: {whole:.2f} s (goal: 25)")


if __name__ == "__main__":
    draws(int(sys.argv[1]) if len(sys.argv) > 1 else 5)
    commands()
