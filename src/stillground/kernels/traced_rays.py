"""Rays traced from a receiver to the source down the gradient of the travel time.

Within a cell T is the distance from the source times the bilinear tau. A ray is a chain of straight
pieces of at most half a cell; by Fermat's principle its time is off by the square of its error
in place. Where it would leave the ground it slides along the edge of the last cells. Padded arrays as
in `fast_marching`.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numba import njit
from numpy.typing import NDArray

from stillground.kernels.fast_marching import NEAR, PAD
from stillground.kernels.segments import mean_weights, room

Array = NDArray[np.float64]
Integers = NDArray[np.int64]

_JIT: dict[str, Any] = {"nogil": True, "cache": True, "error_model": "numpy"}
_ROOM = room(NEAR)


@njit(**_JIT)
def _ground(n: int, stride: int, field: Array) -> bool:
    """Whether the cell whose lowest corner is ``n`` has a time at all four."""
    return bool(
        max(max(field[n, 0], field[n + 1, 0]), max(field[n + stride, 0], field[n + stride + 1, 0])) < np.inf
    )


@njit(**_JIT)
def _cell(a: float, b: float, rows: int, stride: int, field: Array) -> int:
    """Lowest corner of a ground cell that holds (a, b), edges included; -1 when there is none."""
    i = min(max(int(np.floor(a)), PAD), rows - PAD - 2)
    j = min(max(int(np.floor(b)), PAD), stride - PAD - 2)
    for back_a in range(2):
        for back_b in range(2):
            if (back_a == 0 or a == i) and (back_b == 0 or b == j):
                n = (i - back_a) * stride + j - back_b
                if _ground(n, stride, field):
                    return n
    return -1


@njit(**_JIT)
def _downhill(
    a: float, b: float, n: int, stride: int, field: Array, source: Array, spacing: Array
) -> tuple[float, float]:
    """Direction of steepest descent of T in cell ``n``: metres, of unit length; zeros where it is flat."""
    i = n // stride
    u, v = a - i, b - (n - i * stride)
    x, z = (a - source[0]) * spacing[0], (b - source[1]) * spacing[1]
    low, high = field[n, 1], field[n + 1, 1]
    low_next, high_next = field[n + stride, 1], field[n + stride + 1, 1]
    tau = (1.0 - u) * ((1.0 - v) * low + v * high) + u * ((1.0 - v) * low_next + v * high_next)
    slope_a = ((1.0 - v) * (low_next - low) + v * (high_next - high)) / spacing[0]
    slope_b = ((1.0 - u) * (high - low) + u * (high_next - low_next)) / spacing[1]
    square = x * x + z * z
    down_a, down_b = -(square * slope_a + tau * x), -(square * slope_b + tau * z)
    norm = np.sqrt(down_a * down_a + down_b * down_b)
    if norm == 0.0:
        return 0.0, 0.0
    return down_a / norm, down_b / norm


@njit(**_JIT)
def trace(
    slowness: Array,
    field: Array,
    source: Array,
    spacing: Array,
    receiver: Array,
    lengths: Array,
    row: Integers,
) -> tuple[int, float]:
    """Follow one ray.

    Parameters
    ----------
    slowness : array, shape (n, m)
        Padded, s/m.
    field : array, shape (n * m, 2)
        T and tau as `fast_marching.march` left them.
    source, receiver : array, shape (2,)
        In index units of the padded array.
    spacing : array, shape (2,)
        m.
    lengths : array, shape (n * m,)
        Zeros; filled with the length of the ray in each node's basis function, m.
    row : int array, shape (n * m,)
        Filled with the nodes that the ray touches.

    Returns
    -------
    int, float
        Nodes touched, and the ray's time, s: infinite where it got lost.
    """
    rows, stride = slowness.shape
    slow = slowness.reshape(-1)
    nodes, weights = np.empty(_ROOM, np.int64), np.empty(_ROOM)
    step = 0.5 * min(spacing[0], spacing[1])
    a, b = receiver[0], receiver[1]
    touched = 0
    time = 0.0
    # A first arrival is never this much longer than twice around the section.
    for _ in range(int(8 * (rows * spacing[0] + stride * spacing[1]) / step)):
        arrived = (a - source[0]) ** 2 + (b - source[1]) ** 2 <= NEAR**2
        if arrived:
            next_a, next_b = source[0], source[1]
        else:
            n = _cell(a, b, rows, stride, field)
            if n < 0:
                return touched, np.inf
            down_a, down_b = _downhill(a, b, n, stride, field, source, spacing)
            half_a = a + 0.5 * step * down_a / spacing[0]
            half_b = b + 0.5 * step * down_b / spacing[1]
            half_a = min(max(half_a, float(PAD)), float(rows - PAD - 1))
            half_b = min(max(half_b, float(PAD)), float(stride - PAD - 1))
            middle = _cell(half_a, half_b, rows, stride, field)
            if middle >= 0:
                down_a, down_b = _downhill(half_a, half_b, middle, stride, field, source, spacing)
            next_a = min(max(a + step * down_a / spacing[0], float(PAD)), float(rows - PAD - 1))
            next_b = min(max(b + step * down_b / spacing[1], float(PAD)), float(stride - PAD - 1))
            if _cell(next_a, next_b, rows, stride, field) < 0:
                # Along the edge: down to the top of the ground, or else only up or down.
                if _cell(next_a, np.floor(next_b), rows, stride, field) >= 0:
                    next_b = np.floor(next_b)
                else:
                    next_a = np.floor(a) if next_a < a else np.ceil(a)
            if next_a == a and next_b == b:
                return touched, np.inf
        length = np.hypot((next_a - a) * spacing[0], (next_b - b) * spacing[1])
        entries = mean_weights(a, b, next_a, next_b, stride, nodes, weights)
        for e in range(entries):
            m = nodes[e]
            if lengths[m] == 0.0:
                row[touched] = m
                touched += 1
            lengths[m] += length * weights[e]
            time += length * weights[e] * slow[m]
        if arrived:
            return touched, time
        a, b = next_a, next_b
    return touched, np.inf
