"""Derivatives of marched travel times: the march's stencils run once more, onwards or backwards.

Where ``(a_1 tau - b_1)^2 + (a_2 tau - b_2)^2 = s^2 r^2`` held when a node was accepted, with each b
linear in the tau of earlier nodes, the derivatives obey, with ``g = a tau - b``,

    (g_1 a_1 + g_2 a_2) dtau = (g_1^2 + g_2^2) ds / s + g_1 db_1 + g_2 db_2,

also where a front crept along the surface and ``g_1`` is a share of s r that only places set.

The tangent takes the nodes in the order of acceptance; the adjoint takes the same numbers in the
reverse order and so is its transpose to rounding. Padded arrays as in `fast_marching`; a trailing
axis holds independent columns that share the traversal.
"""

from __future__ import annotations

from collections.abc import Callable
from functools import cache
from typing import Any

import numpy as np
from numba import njit
from numpy.typing import NDArray

from stillground.kernels.fast_marching import (
    AHEAD,
    AHEAD_2,
    BASE,
    BEHIND_2,
    NEAR,
    NOTHING,
    SLOPE_BEHIND,
    STRAIGHT,
)
from stillground.kernels.segments import mean_weights, room

Array = NDArray[np.float64]
Places = NDArray[np.int32]
Codes = NDArray[np.uint8]

_JIT: dict[str, Any] = {"nogil": True, "cache": True, "error_model": "numpy"}
_ROOM = room(NEAR)


@njit(inline="always", **_JIT)
def _axis(
    kind: int, other: int, n: int, step: int, other_step: int, x: float, square: float, h: float, tau: Array
) -> tuple[float, float, int, float, int, float]:
    """``a`` and ``b`` of one axis, and the two earlier nodes that b hangs on with their weights."""
    if kind == NOTHING:
        return 0.0, 0.0, n, 0.0, n, 0.0
    c = square / h
    if kind < SLOPE_BEHIND:
        ahead = kind >= AHEAD
        step = step if ahead else -step
        c = -c if ahead else c
        if kind in (BEHIND_2, AHEAD_2):
            first, second = n + step, n + 2 * step
            b = c * (2.0 * tau[first] - 0.5 * tau[second])
            return 1.5 * c + x, b, first, 2.0 * c, second, -0.5 * c
        return c + x, c * tau[n + step], n + step, c, n, 0.0
    came_from = n + other_step if other >= AHEAD else n - other_step
    aside = came_from - step if kind == SLOPE_BEHIND else came_from + step
    c = c if kind == SLOPE_BEHIND else -c
    return x, c * (tau[aside] - tau[came_from]), aside, c, came_from, -c


@njit(**_JIT)
def _stencil(
    n: int, code: int, stride: int, slow: Array, source: Array, spacing: Array, tau: Array
) -> tuple[float, int, float, int, float, int, float, int, float]:
    """Weight of the node's own slowness in its tau; four earlier nodes and the weights of their tau."""
    i = n // stride
    j = n - i * stride
    x_a, x_b = (i - source[0]) * spacing[0], (j - source[1]) * spacing[1]
    square = x_a * x_a + x_b * x_b
    kind_a, kind_b = code % BASE, code // BASE
    a_a, b_a, n_1, w_1, n_2, w_2 = _axis(kind_a, kind_b, n, stride, 1, x_a, square, spacing[0], tau)
    a_b, b_b, n_3, w_3, n_4, w_4 = _axis(kind_b, kind_a, n, 1, stride, x_b, square, spacing[1], tau)
    g_a, g_b = a_a * tau[n] - b_a, a_b * tau[n] - b_b
    scale = 1.0 / (g_a * a_a + g_b * a_b)
    g_a *= scale
    g_b *= scale
    own = (g_a * g_a + g_b * g_b) / (slow[n] * scale)
    return own, n_1, g_a * w_1, n_2, g_a * w_2, n_3, g_b * w_3, n_4, g_b * w_4


@cache
def tangent(k: int) -> Callable[..., None]:
    """Kernel ``(slowness, source, spacing, tau, code, order, change, result)``.

    ``change`` and ``result``, shape (n_padded, k): of slowness and, at the nodes of ``order``, of tau;
    ``slowness`` has the padded shape, ``tau`` and ``code`` shape (n_padded,) as the march left them.
    """

    @njit(**_JIT)
    def kernel(
        slowness: Array,
        source: Array,
        spacing: Array,
        tau: Array,
        code: Codes,
        order: Places,
        change: Array,
        result: Array,
    ) -> None:
        stride = slowness.shape[1]
        slow = slowness.reshape(-1)
        nodes, weights = np.empty(_ROOM, np.int64), np.empty(_ROOM)
        for at in range(order.size):
            n = np.int64(order[at])
            if code[n] == STRAIGHT:
                i = n // stride
                entries = mean_weights(
                    source[0], source[1], float(i), float(n - i * stride), stride, nodes, weights
                )
                for q in range(k):
                    total = 0.0
                    for e in range(entries):
                        total += weights[e] * change[nodes[e], q]
                    result[n, q] = total
            else:
                own, n_1, w_1, n_2, w_2, n_3, w_3, n_4, w_4 = _stencil(
                    n, np.int64(code[n]), stride, slow, source, spacing, tau
                )
                for q in range(k):
                    total = own * change[n, q]
                    # A weight of nothing belongs to the node itself, which has no result as yet.
                    if w_1 != 0.0:
                        total += w_1 * result[n_1, q]
                    if w_2 != 0.0:
                        total += w_2 * result[n_2, q]
                    if w_3 != 0.0:
                        total += w_3 * result[n_3, q]
                    if w_4 != 0.0:
                        total += w_4 * result[n_4, q]
                    result[n, q] = total

    return kernel  # type: ignore[no-any-return]


@cache
def adjoint(k: int) -> Callable[..., None]:
    """Kernel ``(slowness, source, spacing, tau, code, order, weight, result)``: transpose of `tangent`.

    ``weight``, shape (n_padded, k), of each node's tau, is used up; slowness' part is added to ``result``.
    """

    @njit(**_JIT)
    def kernel(
        slowness: Array,
        source: Array,
        spacing: Array,
        tau: Array,
        code: Codes,
        order: Places,
        weight: Array,
        result: Array,
    ) -> None:
        stride = slowness.shape[1]
        slow = slowness.reshape(-1)
        nodes, weights = np.empty(_ROOM, np.int64), np.empty(_ROOM)
        for back in range(order.size):
            n = np.int64(order[order.size - 1 - back])
            empty = True
            for q in range(k):
                empty &= weight[n, q] == 0.0
            if empty:
                continue
            if code[n] == STRAIGHT:
                i = n // stride
                entries = mean_weights(
                    source[0], source[1], float(i), float(n - i * stride), stride, nodes, weights
                )
                for e in range(entries):
                    for q in range(k):
                        result[nodes[e], q] += weights[e] * weight[n, q]
            else:
                own, n_1, w_1, n_2, w_2, n_3, w_3, n_4, w_4 = _stencil(
                    n, np.int64(code[n]), stride, slow, source, spacing, tau
                )
                for q in range(k):
                    w = weight[n, q]
                    result[n, q] += own * w
                    weight[n_1, q] += w_1 * w
                    weight[n_2, q] += w_2 * w
                    weight[n_3, q] += w_3 * w
                    weight[n_4, q] += w_4 * w

    return kernel  # type: ignore[no-any-return]
