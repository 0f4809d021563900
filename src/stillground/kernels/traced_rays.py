"""Rays traced from a receiver to the source down the gradient of the travel time, cell by cell.

Within a cell T is the distance from the source times the bilinear tau, and a ray is one straight
piece. Where the gradients on both sides of a grid line point at the line, as along a refractor or at
the edge of the ground, the ray slides along it: steepest descent of a function with kinks. By
Fermat's principle its time is off by the square of its error in place. Padded arrays as in
`fast_marching`.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numba import njit
from numpy.typing import NDArray

from stillground.kernels.fast_marching import NEAR
from stillground.kernels.segments import mean_weights, room

Array = NDArray[np.float64]
Integers = NDArray[np.int64]

_JIT: dict[str, Any] = {"nogil": True, "cache": True, "error_model": "numpy"}
_ROOM = room(NEAR)


@njit(**_JIT)
def _downhill(
    n: int, u: float, v: float, stride: int, field: Array, source: Array, spacing: Array
) -> tuple[float, float]:
    """Steepest descent at (u, v) of the cell with lowest corner ``n``: minus the gradient of T, times r."""
    i = n // stride
    x = (i + u - source[0]) * spacing[0]
    y = (n - i * stride + v - source[1]) * spacing[1]
    low, high = field[n, 1], field[n + 1, 1]
    next_low, next_high = field[n + stride, 1], field[n + stride + 1, 1]
    tau = (1.0 - u) * ((1.0 - v) * low + v * high) + u * ((1.0 - v) * next_low + v * next_high)
    slope_a = ((1.0 - v) * (next_low - low) + v * (next_high - high)) / spacing[0]
    slope_b = ((1.0 - u) * (high - low) + u * (next_high - next_low)) / spacing[1]
    square = x * x + y * y
    return -(square * slope_a + tau * x), -(square * slope_b + tau * y)


@njit(**_JIT)
def _allowed(u: float, down: float) -> float:
    """``down`` where it leads into the cell from local coordinate ``u``, and else nothing."""
    return 0.0 if (u <= 0.0 and down < 0.0) or (u >= 1.0 and down > 0.0) else down


@njit(**_JIT)
def _way_out(u: float, down: float) -> float:
    """Steps of ``down`` from local coordinate ``u`` to the edge of the cell."""
    if down == 0.0:
        return np.inf
    return ((1.0 if down > 0.0 else 0.0) - u) / down


@njit(**_JIT)
def _next(
    a: float, b: float, stride: int, field: Array, source: Array, spacing: Array
) -> tuple[float, float]:
    """Where the ray leaves the next cell, or the same place where no way leads down."""
    best, cell = 0.0, -1
    best_a = best_b = 0.0
    for back_a in range(1 + (a == np.floor(a))):
        for back_b in range(1 + (b == np.floor(b))):
            i, j = int(a) - back_a, int(b) - back_b
            n = i * stride + j
            # The padding has infinite times.
            if (
                max(max(field[n, 0], field[n + 1, 0]), max(field[n + stride, 0], field[n + stride + 1, 0]))
                == np.inf
            ):
                continue
            down_a, down_b = _downhill(n, a - i, b - j, stride, field, source, spacing)
            down_a, down_b = _allowed(a - i, down_a), _allowed(b - j, down_b)
            rate = np.hypot(down_a, down_b)
            if rate > best:
                best, cell, best_a, best_b = rate, n, down_a, down_b
    if cell < 0:
        return a, b
    i = cell // stride
    j = cell - i * stride
    u, v = a - i, b - j
    down_a, down_b = best_a / spacing[0], best_b / spacing[1]
    out = min(_way_out(u, down_a), _way_out(v, down_b))
    if down_a != 0.0 and down_b != 0.0:
        # The direction half way through, if it leads through the same cell.
        middle_a, middle_b = _downhill(
            cell, u + 0.5 * out * down_a, v + 0.5 * out * down_b, stride, field, source, spacing
        )
        middle_a, middle_b = _allowed(u, middle_a) / spacing[0], _allowed(v, middle_b) / spacing[1]
        if middle_a != 0.0 and middle_b != 0.0:
            down_a, down_b = middle_a, middle_b
            out = min(_way_out(u, down_a), _way_out(v, down_b))
    # Exactly on the line that ends the piece, lest the next one begin in no cell.
    at_a, at_b = _way_out(u, down_a) == out, _way_out(v, down_b) == out
    next_a = i + (1.0 if down_a > 0.0 else 0.0) if at_a else a + out * down_a
    next_b = j + (1.0 if down_b > 0.0 else 0.0) if at_b else b + out * down_b
    return next_a, next_b


@njit(**_JIT)
def follow(stride: int, field: Array, source: Array, spacing: Array, receiver: Array) -> Array:
    """The corners of one ray.

    Parameters
    ----------
    stride : int
        Columns of the padded array.
    field : array, shape (n * stride, 2)
        T and tau as `fast_marching.march` left them.
    source, receiver : array, shape (2,)
        In index units of the padded array.
    spacing : array, shape (2,)
        m.

    Returns
    -------
    array, shape (n_corners, 2)
        From receiver to source, in index units; none where the ray got lost.
    """
    # More pieces than this is a ray that goes in circles.
    most = 8 * (field.shape[0] // stride + stride)
    corners = np.empty((most + 1, 2))
    corners[0] = receiver
    for piece in range(most):
        a, b = corners[piece, 0], corners[piece, 1]
        if (a - source[0]) ** 2 + (b - source[1]) ** 2 <= NEAR**2:
            corners[piece + 1] = source
            return corners[: piece + 2]
        next_a, next_b = _next(a, b, stride, field, source, spacing)
        if next_a == a and next_b == b:
            break
        corners[piece + 1, 0], corners[piece + 1, 1] = next_a, next_b
    return corners[:0]


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
    """Integrate along one ray.

    Parameters
    ----------
    slowness : array, shape (n, m)
        Padded, s/m.
    field, source, spacing, receiver
        As in `follow`.
    lengths : array, shape (n * m,)
        Zeros; filled with the length of the ray in each node's basis function, m.
    row : int array, shape (n * m,)
        Filled with the nodes that the ray touches.

    Returns
    -------
    int, float
        Nodes touched, and the ray's time, s: infinite where it got lost.
    """
    stride = slowness.shape[1]
    slow = slowness.reshape(-1)
    nodes, weights = np.empty(_ROOM, np.int64), np.empty(_ROOM)
    corners = follow(stride, field, source, spacing, receiver)
    touched = 0
    time = 0.0 if len(corners) else np.inf
    for piece in range(len(corners) - 1):
        a, b = corners[piece, 0], corners[piece, 1]
        next_a, next_b = corners[piece + 1, 0], corners[piece + 1, 1]
        length = np.hypot((next_a - a) * spacing[0], (next_b - b) * spacing[1])
        entries = mean_weights(a, b, next_a, next_b, stride, nodes, weights)
        for e in range(entries):
            m = nodes[e]
            if lengths[m] == 0.0:
                row[touched] = m
                touched += 1
            lengths[m] += length * weights[e]
            time += length * weights[e] * slow[m]
    return touched, time
