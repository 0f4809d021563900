"""First-kind integral equations with published answers: kernel, solution and data at given places."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from stillground.protocols import Array


def phillips(s: Array, t: Array) -> tuple[Array, Array, Array]:
    # Phillips (1962), J. ACM 9, example 1, from memory: s and t in [-6, 6].
    def bump(x: Array) -> Array:
        return np.where(np.abs(x) < 3, 1 + np.cos(np.pi * x / 3), 0.0)

    data = (6 - np.abs(s)) * (1 + np.cos(np.pi * s / 3) / 2) + 9 / (2 * np.pi) * np.sin(np.pi * np.abs(s) / 3)
    return bump(s[:, None] - t), bump(t), data


def shaw(s: Array, t: Array) -> tuple[Array, Array, None]:
    # Shaw (1972), J. Math. Anal. Appl. 37, from memory: s and t in [-pi/2, pi/2]; data by quadrature.
    u = np.sin(s[:, None]) + np.sin(t)
    kernel = (np.cos(s[:, None]) + np.cos(t)) ** 2 * np.sinc(u) ** 2
    return kernel, 2 * np.exp(-6 * (t - 0.8) ** 2) + np.exp(-2 * (t + 0.5) ** 2), None


def baart(s: Array, t: Array) -> tuple[Array, Array, Array]:
    # Baart (1982), IMA J. Numer. Anal. 2, from memory: s in [0, pi/2], t in [0, pi].
    data = 2 * np.divide(np.sinh(s), s, out=np.ones_like(s), where=s > 0)
    return np.exp(s[:, None] * np.cos(t)), np.sin(t), data


Published = Callable[[Array, Array], tuple[Array, Array, Array | None]]
PROBLEMS: dict[str, tuple[Published, tuple[float, float], tuple[float, float], float]] = {
    # Data's interval, unknown's interval, correlation length.
    "phillips": (phillips, (-6, 6), (-6, 6), 1.0),
    "shaw": (shaw, (-np.pi / 2, np.pi / 2), (-np.pi / 2, np.pi / 2), 0.3),
    "baart": (baart, (0, np.pi / 2), (0, np.pi), 0.5),
}
