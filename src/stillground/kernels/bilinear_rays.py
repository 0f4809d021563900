"""Exact integrals of bilinear nodal fields along straight rays, in 2-D, without a matrix.

Everything here is in index coordinates: ``a`` along the columns of the field, the axis that the ray
covers faster, and ``b`` across its rows. Between rows j and j+1 the field is
``(1 - v) m_j(a) + v m_{j+1}(a)`` with ``v = b - j`` linear along the ray. With C_j the
antiderivative of row j and E_j that of C_j, the integral over the strip is, by parts, the
difference between its ends of

    S_j(a, v) = (1 - v) C_j(a) + v C_{j+1}(a) + s (E_j - E_{j+1})(a),    s = db/da.

Where the ray passes from strip j-1 to strip j the two contributions leave

    S_{j-1}(a, 1) - S_j(a, 0) = s D_j(a),    D_j = E_{j-1} - 2 E_j + E_{j+1},

so that a ray costs its two ends and one cubic for each row that it crosses: columns cost nothing.
D_j is a cubic spline in ``a`` whose second derivative is the second difference M of the rows; values
of D and M at two neighbouring nodes, four adjacent numbers, give it exactly.

The adjoint scatters the same coefficients and then runs the recurrences for E and C backwards.
Arrays carry a trailing axis of independent columns that share the traversal.
"""

from __future__ import annotations

from collections.abc import Callable
from functools import cache
from typing import Any

import numpy as np
from numba import njit
from numpy.typing import NDArray

Array = NDArray[np.float64]

_JIT: dict[str, Any] = {
    "nogil": True,
    "cache": True,
    "error_model": "numpy",
    "fastmath": {"reassoc", "contract", "arcp", "nsz"},
}

# A row of `rays`: the end with the smaller b first.
_A_LOW, _B_LOW, _A_HIGH, _B_HIGH, _SCALE = range(5)


def ray_table(starts: Array, ends: Array, lengths: Array) -> tuple[Array, NDArray[np.int64]]:
    """Orders rays for the kernels.

    Parameters
    ----------
    starts, ends : array, shape (n_rays, 2)
        Index coordinates (b, a): across rows, along columns.
    lengths : array, shape (n_rays,)
        Length that the integral is to be taken over, in any unit.

    Returns
    -------
    rays : array, shape (n_rays, 5)
        a and b of the lower end, a and b of the higher end, length over the signed change of a.
    crossed : int array, shape (n_rays,)
        Rows that each ray crosses.
    """
    swap = starts[:, :1] > ends[:, :1]
    low, high = np.where(swap, ends, starts), np.where(swap, starts, ends)
    run = high[:, 1] - low[:, 1]
    scale = np.divide(lengths, run, out=np.zeros_like(run), where=run != 0)
    rays = np.column_stack([low[:, 1], low[:, 0], high[:, 1], high[:, 0], scale])
    crossed = np.maximum(np.ceil(high[:, 0]) - np.floor(low[:, 0]) - 1, 0).astype(np.int64)
    return np.ascontiguousarray(rays), crossed


@cache
def antiderivatives(k: int) -> Callable[..., None]:
    """Kernel ``(m, c, e, start, stop)``: fills rows of ``c`` and ``e`` from the field ``m``."""

    @njit(**_JIT)
    def kernel(m: Array, c: Array, e: Array, start: int, stop: int) -> None:
        columns = m.shape[1]
        for offset in range(stop - start):
            j = start + offset
            for q in range(k):
                once, twice, here = 0.0, 0.0, m[j, 0, q]
                c[j, 0, q] = 0.0
                e[j, 0, q] = 0.0
                for i in range(1, columns):
                    there = m[j, i, q]
                    twice += once + (2.0 * here + there) * (1.0 / 6.0)
                    once += 0.5 * (here + there)
                    c[j, i, q] = once
                    e[j, i, q] = twice
                    here = there

    return kernel  # type: ignore[no-any-return]


@cache
def second_differences(k: int) -> Callable[..., None]:
    """Kernel ``(m, e, dm, start, stop)``: fills rows of ``dm`` (rows, columns, 2, k) with D and M."""

    @njit(**_JIT)
    def kernel(m: Array, e: Array, dm: Array, start: int, stop: int) -> None:
        rows, columns = m.shape[0], m.shape[1]
        for offset in range(stop - start):
            j = start + offset
            if 0 < j < rows - 1:
                before, here, after, out = e[j - 1], e[j], e[j + 1], dm[j]
                m_before, m_here, m_after = m[j - 1], m[j], m[j + 1]
                for i in range(columns):
                    for q in range(k):
                        out[i, 0, q] = (before[i, q] - here[i, q]) + (after[i, q] - here[i, q])
                        out[i, 1, q] = (m_before[i, q] - m_here[i, q]) + (m_after[i, q] - m_here[i, q])

    return kernel  # type: ignore[no-any-return]


@cache
def antiderivatives_adjoint(k: int) -> Callable[..., None]:
    """Kernel ``(m, c, e, dm, start, stop)``: adjoint of the two above; adds to rows of ``m``.

    ``e`` is used up; the first and last row of ``dm`` are taken as zero, since no ray crosses them.
    """

    @njit(**_JIT)
    def kernel(m: Array, c: Array, e: Array, dm: Array, start: int, stop: int) -> None:
        rows, columns = m.shape[0], m.shape[1]
        for offset in range(stop - start):
            j = start + offset
            before, here, after = dm[max(j - 1, 0)], dm[j], dm[min(j + 1, rows - 1)]
            for i in range(columns):
                for q in range(k):
                    e[j, i, q] += (before[i, 0, q] - here[i, 0, q]) + (after[i, 0, q] - here[i, 0, q])
                    m[j, i, q] += (before[i, 1, q] - here[i, 1, q]) + (after[i, 1, q] - here[i, 1, q])
            for q in range(k):
                once, twice = 0.0, 0.0
                for back in range(columns - 1):
                    i = columns - 1 - back
                    once += c[j, i, q] + twice
                    twice += e[j, i, q]
                    m[j, i, q] += 0.5 * once + twice * (1.0 / 6.0)
                    m[j, i - 1, q] += 0.5 * once + twice * (1.0 / 3.0)

    return kernel  # type: ignore[no-any-return]


@njit(inline="always", **_JIT)
def _spline(a: float, columns: int) -> tuple[Any, float, float, float, float]:
    """Node left of ``a`` and the weights there of value and second derivative, then those to the right."""
    left = min(max(np.floor(a), 0.0), columns - 2.0)
    u = a - left
    t = 1.0 - u
    return np.uintp(np.int64(left)), t, t * (t * t - 1.0) * (1.0 / 6.0), u, u * (u * u - 1.0) * (1.0 / 6.0)


@njit(**_JIT)
def _strips(ray: Array, rows: int) -> tuple[int, int]:
    low = min(max(int(np.floor(ray[_B_LOW])), 0), rows - 2)
    high = min(max(int(np.ceil(ray[_B_HIGH])) - 1, low), rows - 2)
    return low, high


@cache
def forward(k: int) -> Callable[..., None]:
    """Kernel ``(rays, start, stop, m, c, e, dm, out)``: fills rows of ``out`` (n_rays, k)."""

    @njit(**_JIT)
    def kernel(
        rays: Array, start: int, stop: int, m: Array, c: Array, e: Array, dm: Array, out: Array
    ) -> None:
        rows, columns = m.shape[0], m.shape[1]
        one = np.uintp(1)
        total = np.zeros(k)
        for offset in range(stop - start):
            ray = rays[start + offset]
            for q in range(k):
                total[q] = 0.0
            if ray[_SCALE] != 0.0:
                low, high = _strips(ray, rows)
                s = (ray[_B_HIGH] - ray[_B_LOW]) / (ray[_A_HIGH] - ray[_A_LOW])
                if high > low:
                    back = 1.0 / s
                    first = ray[_A_LOW] + (low + 1 - ray[_B_LOW]) * back
                    if k == 1:
                        # A scalar sum stays in a register; the general loop below is a quarter slower.
                        alone = 0.0
                        for step in range(high - low):
                            i, t, cubic_t, u, cubic_u = _spline(first + step * back, columns)
                            j = np.uintp(low + 1 + step)
                            alone += (
                                t * dm[j, i, 0, 0]
                                + cubic_t * dm[j, i, 1, 0]
                                + u * dm[j, i + one, 0, 0]
                                + cubic_u * dm[j, i + one, 1, 0]
                            )
                        total[0] = alone * s
                    else:
                        for step in range(high - low):
                            i, t, cubic_t, u, cubic_u = _spline(first + step * back, columns)
                            j = np.uintp(low + 1 + step)
                            for q in range(k):
                                total[q] += s * (
                                    t * dm[j, i, 0, q]
                                    + cubic_t * dm[j, i, 1, q]
                                    + u * dm[j, i + one, 0, q]
                                    + cubic_u * dm[j, i + one, 1, q]
                                )
                for side in range(2):
                    a, b = ray[2 * side], ray[2 * side + 1]
                    j = np.uintp(high if side else low)
                    sign, v = 2.0 * side - 1.0, b - j
                    i, t, cubic_t, u, cubic_u = _spline(a, columns)
                    for q in range(k):
                        m0, m1 = m[j, i, q], m[j, i + one, q]
                        n0, n1 = m[j + one, i, q], m[j + one, i + one, q]
                        c0 = c[j, i, q] + u * (m0 + 0.5 * u * (m1 - m0))
                        c1 = c[j + one, i, q] + u * (n0 + 0.5 * u * (n1 - n0))
                        f = (
                            t * (e[j, i, q] - e[j + one, i, q])
                            + u * (e[j, i + one, q] - e[j + one, i + one, q])
                            + cubic_t * (m0 - n0)
                            + cubic_u * (m1 - n1)
                        )
                        total[q] += sign * ((1.0 - v) * c0 + v * c1 + s * f)
            for q in range(k):
                out[start + offset, q] = ray[_SCALE] * total[q]

    return kernel  # type: ignore[no-any-return]


@cache
def adjoint_crossings(k: int) -> Callable[..., None]:
    """Kernel ``(rays, y, dm, start, stop)``: adds the part of rays crossing rows ``start`` to ``stop``.

    Blocks of rows share no node, so that they need no sums of their own.
    """

    @njit(**_JIT)
    def kernel(rays: Array, y: Array, dm: Array, start: int, stop: int) -> None:
        rows, columns = dm.shape[0], dm.shape[1]
        one = np.uintp(1)
        weight = np.zeros(k)
        for r in range(rays.shape[0]):
            ray = rays[r]
            if ray[_SCALE] != 0.0:
                low, high = _strips(ray, rows)
                low, high = max(low + 1, start), min(high + 1, stop)
                if high > low:
                    s = (ray[_B_HIGH] - ray[_B_LOW]) / (ray[_A_HIGH] - ray[_A_LOW])
                    back = 1.0 / s
                    first = ray[_A_LOW] + (low - ray[_B_LOW]) * back
                    for q in range(k):
                        weight[q] = y[r, q] * ray[_SCALE] * s
                    for step in range(high - low):
                        i, t, cubic_t, u, cubic_u = _spline(first + step * back, columns)
                        j = np.uintp(low + step)
                        for q in range(k):
                            dm[j, i, 0, q] += weight[q] * t
                            dm[j, i, 1, q] += weight[q] * cubic_t
                            dm[j, i + one, 0, q] += weight[q] * u
                            dm[j, i + one, 1, q] += weight[q] * cubic_u

    return kernel  # type: ignore[no-any-return]


@cache
def adjoint_ends(k: int) -> Callable[..., None]:
    """Kernel ``(rays, y, m, c, e)``: adds the ends' part of every ray, shapes (rows, columns, k)."""

    @njit(**_JIT)
    def kernel(rays: Array, y: Array, m: Array, c: Array, e: Array) -> None:
        rows, columns = m.shape[0], m.shape[1]
        one = np.uintp(1)
        for r in range(rays.shape[0]):
            ray = rays[r]
            if ray[_SCALE] != 0.0:
                low, high = _strips(ray, rows)
                s = (ray[_B_HIGH] - ray[_B_LOW]) / (ray[_A_HIGH] - ray[_A_LOW])
                for side in range(2):
                    a, b = ray[2 * side], ray[2 * side + 1]
                    j = np.uintp(high if side else low)
                    sign, v = 2.0 * side - 1.0, b - j
                    i, t, cubic_t, u, cubic_u = _spline(a, columns)
                    left, right = u - 0.5 * u * u, 0.5 * u * u
                    for q in range(k):
                        w = sign * ray[_SCALE] * y[r, q]
                        w0, w1, ws = w * (1.0 - v), w * v, w * s
                        c[j, i, q] += w0
                        c[j + one, i, q] += w1
                        e[j, i, q] += ws * t
                        e[j + one, i, q] -= ws * t
                        e[j, i + one, q] += ws * u
                        e[j + one, i + one, q] -= ws * u
                        m[j, i, q] += w0 * left + ws * cubic_t
                        m[j, i + one, q] += w0 * right + ws * cubic_u
                        m[j + one, i, q] += w1 * left - ws * cubic_t
                        m[j + one, i + one, q] += w1 * right - ws * cubic_u

    return kernel  # type: ignore[no-any-return]
