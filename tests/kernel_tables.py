"""Writes surveys with given kernels, as a user would: two tables and a configuration."""

from __future__ import annotations

from pathlib import Path

import numpy as np

from stillground.protocols import Array

CONFIG = """
title = "Kernels (invented)"
[survey]
kind = "kernel"
files = ["data.csv"]
[ground]
correlation = "0.1 m"
[physics]
kernel = "kernel.csv"
[solver]
iterations = 25
[refinement]
levels = 3
[output]
products = ["section", "history"]
"""


def integration(n: int, every: int) -> tuple[Array, Array, Array]:
    """Integration from 0 to every ``every``-th node of [0, 1]: nodes, ends, kernels, 1/2 at the end."""
    nodes = np.linspace(0, 1, n)
    ends = nodes[every:-1:every]
    return nodes, ends, np.heaviside(ends[:, None] - nodes, 0.5)


def write_kernels(path: Path, nodes: Array, kernels: Array) -> None:
    """A CSV with the nodes for its header."""
    lines = [",".join(f"{value:.12g}" for value in row) for row in (nodes, *kernels)]
    path.write_text("\n".join(lines) + "\n")


def write_data(path: Path, data: Array, error: float) -> None:
    rows = [f"{value:.12g},{error:.6g}" for value in data]
    path.write_text("\n".join(["value,value_error", *rows]) + "\n")


def write_survey(
    folder: Path, nodes: Array, kernels: Array, clean: Array, noise: float, seed: int = 0
) -> Path:
    """Tables with noise as a share of the data's size, and the configuration for them."""
    error = noise * float(np.sqrt(np.mean(clean**2)))
    write_kernels(folder / "kernel.csv", nodes, kernels)
    write_data(
        folder / "data.csv", clean + error * np.random.default_rng(seed).standard_normal(clean.size), error
    )
    (folder / "kernel.toml").write_text(CONFIG)
    return folder / "kernel.toml"
