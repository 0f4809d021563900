"""The report of 80 pictures of 400 by 600 nodes: bytes, time to make it, time until a browser has it ready.

    python -m tests.benchmarks.bench_report

Times stand beside those of things of the same size done by general libraries in the same run: reading the
product files, and deflating the pictures once.
"""

from __future__ import annotations

import tempfile
import time
import zlib
from dataclasses import replace
from pathlib import Path

import numpy as np
import xarray as xr
from tests.products.made_up_folders import write_folder
from tests.products.made_up_results import SURFACE, axes_of, make_result, slowness
from tests.products.test_report_browser import CHROMIUM, DRIVER, Browser

from stillground.products.report import write_report
from stillground.protocols import Result

SHAPE, SNAPSHOTS = (600, 400), 80


def large() -> Result:
    """A made-up result on many nodes, with rough ground so that nothing packs too well."""
    small = make_result()
    axes = tuple(np.linspace(axis[0], axis[-1], n) for axis, n in zip(axes_of(0.25), SHAPE, strict=True))
    x, z = np.meshgrid(*axes, indexing="ij")
    rough = np.random.default_rng(1).normal(size=SHAPE)
    for axis in (0, 1):
        kernel = np.hanning(25) / np.hanning(25).sum()
        rough = np.apply_along_axis(np.convolve, axis, rough, kernel, "same")

    def picture(k: float) -> np.ndarray:
        return slowness(x, z, 1 - np.exp(-k / 12)) * (1 + 0.2 * (1 - np.exp(-k / 40)) * rough)

    def field(values: np.ndarray) -> np.ndarray:
        nodes = small.axes
        along = [
            np.interp(axis, n, np.arange(n.size)).round().astype(int)
            for axis, n in zip(axes, nodes, strict=True)
        ]
        return values[np.ix_(*along)]

    assert small.rehearsal is not None
    assert small.sensitivity is not None
    return replace(
        small,
        axes=axes,
        model=picture(9.0),
        mesh_change=field(small.mesh_change),
        coverage=replace(small.coverage, values=field(small.coverage.values)),
        noise_part=field(small.noise_part),
        choices=tuple(replace(c, model=picture(c.iteration)) for c in small.choices),
        snapshots=tuple((k, picture(k)) for k in range(SNAPSHOTS)),
        rehearsal=replace(
            small.rehearsal,
            total_error=field(small.rehearsal.total_error),
            resolved=field(small.rehearsal.resolved),
        ),
        sensitivity=replace(
            small.sensitivity,
            spread=field(small.sensitivity.spread),
            investigation=field(small.sensitivity.investigation),
        ),
    )


def main() -> None:
    with tempfile.TemporaryDirectory() as held:
        folder = write_folder(Path(held) / "large", {"line": large()}, surface=SURFACE)
        begin = time.perf_counter()
        for name in ("section", "history", "ladder"):
            pictures = xr.load_dataset(folder / f"line_{name}.nc")
            if name == "history":
                stack = pictures["slowness_at_iteration"].values
        reading = time.perf_counter() - begin
        begin = time.perf_counter()
        zlib.compress((255 * np.nan_to_num(stack / np.nanmax(stack))).astype(np.uint8).tobytes(), 6)
        deflating = time.perf_counter() - begin
        begin = time.perf_counter()
        path = write_report(folder)
        making = time.perf_counter() - begin
        text = path.read_text(encoding="utf-8")
        print(
            f"{SNAPSHOTS} pictures of {SHAPE[1]} by {SHAPE[0]} nodes, 8 picks: "
            f"{len(text.encode()) / 1e6:.2f} MB"
        )
        print("budget: " + ("half resolution" if "half resolution" in text else "nothing taken away"))
        print(
            f"made in {making:.2f} s; reading the files alone {reading:.2f} s, "
            f"deflating the pictures once {deflating:.2f} s"
        )
        if not (CHROMIUM and DRIVER):
            print("no chromium here: how fast a browser is ready was not measured")
            return
        browser = Browser(Path(held) / "chromium")
        try:
            browser.open(path)
            ready = []
            for _ in range(3):
                browser.open(path)
                ready.append(browser.run("return performance.getEntriesByName('ready')[0].startTime") / 1000)
            step = browser.run(
                "const t = performance.now(); for (let k = 0; k < 20; k++) window.report.show(k);"
                "return (performance.now() - t) / 20"
            )
            print(f"ready in the browser after {min(ready):.2f} s; a step of the slider {step:.0f} ms")
        finally:
            browser.driver.quit()


if __name__ == "__main__":
    main()
