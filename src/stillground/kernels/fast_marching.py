"""First-arrival travel times in two dimensions by fast marching, second order and factored.

The eikonal equation ``|grad T| = s`` is solved for ``tau = T / r`` with r the distance from the source,
which is smooth where T is not. With one-sided differences of tau along each axis it reads, times r,

    (a_1 tau - b_1)^2 + (a_2 tau - b_2)^2 = s^2 r^2,
    a = r^2 c + x,   b = r^2 (weighted tau of the neighbours),

x being the distance from the source along the axis. Nodes are accepted in the order of T; only
accepted neighbours enter. An axis has no earlier neighbour where T is least along it, as in the rows
next to the source's. Its slope is then not zero but that of tau where the front came from; this is
known only when the node's turn comes, and without it the error falls with the spacing and not with
its square.

Nodes beside the air stand a little above the ground, and their times carry on those below the surface;
a march from node to node would follow the steps of the grid instead. Where an axis has no earlier
neighbour because there is air, the slope is that on the side of the ground as long as the front comes
from there, and else that of a front which creeps along the surface.

Arrays are padded by two nodes on each side, so that no stencil asks for bounds; what is not accepted,
not ground or padding has an infinite time.

References: Sethian (1996, PNAS 93, 1591) for fast marching; Fomel, Luo & Zhao (2009, J. Comput.
Phys. 228, 6440) for the factored equation; Treister & Haber (2016, J. Comput. Phys. 324, 210) for the two
together.
"""

from __future__ import annotations

import numpy as np
from numba import njit
from numpy.typing import NDArray

from stillground.kernels.segments import mean_weights, room

Array = NDArray[np.float64]
Integers = NDArray[np.int64]
Places = NDArray[np.int32]
Codes = NDArray[np.uint8]

PAD = 2

# States of a node beside its place in the heap.
FAR, CLOSED = -1, -2

# Stencils: along each axis nothing, one or two neighbours behind, one or two ahead, or the slope where
# the front came from, towards the neighbour behind or ahead; the two axes as digits to the base 7.
NOTHING, BEHIND, BEHIND_2, AHEAD, AHEAD_2, SLOPE_BEHIND, SLOPE_AHEAD = range(7)
BASE = 7
STRAIGHT = BASE * BASE

# Times at nodes this near the source, in nodes, are integrals along straight lines.
NEAR = 3.0

# Slopes on the two sides of a node agree when they differ by no more than the first part of its slowness,
# and are slight up to the second.
AGREE, SLIGHT = 0.1, 0.2

_ROOM = room(NEAR)


@njit(nogil=True, cache=True, error_model="numpy")
def _creep(width: float, above: float, above_1: float, above_2: float) -> float:
    """Way of a front along the surface between nodes ``width`` apart, over ``width``.

    The nodes and the one before them are so far above the surface, and have the times of a front that
    goes on there as at the surface below them.
    """
    rise, rise_1 = above_1 - above, above_2 - above_1
    piece, piece_1 = np.hypot(width, rise), np.hypot(width, rise_1)
    way = float((piece + rise / piece * above - rise_1 / piece_1 * above_1) / width)
    # A node within the ground leads there straight.
    return way if above_1 >= 0.0 else min(way, 1.0)


@njit(nogil=True, cache=True, error_model="numpy", fastmath={"reassoc", "contract", "arcp", "nsz"})
def march(
    slowness: Array,
    closed: Places,
    surface: Array,
    source: Array,
    spacing: Array,
    field: Array,
    place: Places,
    code: Codes,
    order: Places,
    keys: Array,
    heap: Places,
) -> int:
    """Solve for one source.

    Parameters
    ----------
    slowness : array, shape (n, m)
        Padded, s/m; zero in the padding.
    closed : int32 array, shape (n * m,)
        FAR on the nodes of the ground, CLOSED elsewhere.
    surface : array, shape (n,)
        Height of the ground's surface at each row of nodes, in index units along the second axis.
    source : array, shape (2,)
        In index units of the padded array.
    spacing : array, shape (2,)
        m.
    field : array, shape (n * m, 2)
        Filled with T, s, and tau, s/m.
    place, code, order, keys, heap : arrays, shape (n * m,)
        Work, but for ``code``, each node's stencil, and ``order``, the nodes as they were accepted.

    Returns
    -------
    int
        Nodes accepted.
    """
    n_rows, stride = slowness.shape
    slow = slowness.reshape(-1)
    source_a, source_b = source[0], source[1]
    h_a, h_b = spacing[0], spacing[1]
    over_a, over_b = 1.0 / h_a, 1.0 / h_b
    for n in range(slow.size):
        field[n, 0] = np.inf
        place[n] = closed[n]
        code[n] = 0
    size = 0
    count = 0

    nodes, weights = np.empty(_ROOM, np.int64), np.empty(_ROOM)
    for i in range(max(int(np.ceil(source_a - NEAR)), 0), min(int(source_a + NEAR) + 1, n_rows)):
        for j in range(max(int(np.ceil(source_b - NEAR)), 0), min(int(source_b + NEAR) + 1, stride)):
            m = i * stride + j
            if place[m] != FAR or (i - source_a) ** 2 + (j - source_b) ** 2 > NEAR**2:
                continue
            entries = mean_weights(source_a, source_b, float(i), float(j), stride, nodes, weights)
            mean = 0.0
            through_air = False
            for e in range(entries):
                mean += weights[e] * slow[nodes[e]]
                through_air |= closed[nodes[e]] == CLOSED
            if through_air:
                continue
            field[m, 1] = mean
            code[m] = STRAIGHT
            key = mean * np.sqrt(((i - source_a) * h_a) ** 2 + ((j - source_b) * h_b) ** 2)
            hole = size
            size += 1
            while hole > 0:
                parent = (hole - 1) >> 2
                if keys[parent] <= key:
                    break
                keys[hole] = keys[parent]
                heap[hole] = heap[parent]
                place[heap[hole]] = hole
                hole = parent
            keys[hole] = key
            heap[hole] = m
            place[m] = hole

    while size > 0:
        n = int(heap[0])
        time = keys[0]
        size -= 1
        if size > 0:
            key = keys[size]
            last = heap[size]
            hole = 0
            while True:
                child = 4 * hole + 1
                if child >= size:
                    break
                least = keys[child]
                if child + 3 < size:
                    least_2 = keys[child + 2]
                    other = child + 2
                    if keys[child + 3] < least_2:
                        other = child + 3
                        least_2 = keys[other]
                    if keys[child + 1] < least:
                        child += 1
                        least = keys[child]
                    if least_2 < least:
                        child = other
                        least = least_2
                else:
                    for other in range(child + 1, size):
                        if keys[other] < least:
                            child = other
                            least = keys[other]
                if least >= key:
                    break
                keys[hole] = least
                heap[hole] = heap[child]
                place[heap[hole]] = hole
                hole = child
            keys[hole] = key
            heap[hole] = last
            place[last] = hole

        i0 = n // stride
        j0 = n - i0 * stride
        digits = int(code[n])
        if digits < BASE or (digits < STRAIGHT and digits % BASE == 0):
            # One axis only: now that all earlier neighbours are known, take the other one's slope.
            along = digits < BASE
            kind = digits if along else digits // BASE
            x_a, x_b = (i0 - source_a) * h_a, (j0 - source_b) * h_b
            square = x_a * x_a + x_b * x_b
            behind = kind <= BEHIND_2
            step = stride if along else 1
            step = -step if behind else step
            aside = 1 if along else stride
            x, y = (x_a, x_b) if along else (x_b, x_a)
            c = square * (over_a if along else over_b)
            c = c if behind else -c
            across = square * (over_b if along else over_a)
            tau_1 = field[n + step, 1]
            if kind in (BEHIND_2, AHEAD_2):
                a = 1.5 * c + x
                b = c * (2.0 * tau_1 - 0.5 * field[n + 2 * step, 1])
            else:
                a = c + x
                b = c * tau_1
            # The slope at the neighbour that the front came from, the flatter of those on its two sides.
            # Where they differ there is a kink or a corner near and none is safe. Where T is least along
            # an axis its slope is slight, or that of the distance.
            s = slow[n]
            s_r = s * np.sqrt(square)
            slope = NOTHING
            slight = SLIGHT * s_r
            least = field[n + step, 0]
            other_b = across * (field[n + step - aside, 1] - tau_1)
            candidate = across * (tau_1 - field[n + step + aside, 1])
            before = field[n + step - aside, 0] < np.inf
            after = field[n + step + aside, 0] < np.inf
            if before and after:
                if abs(candidate - other_b) <= AGREE * s_r:
                    slope = SLOPE_BEHIND
                    if abs(y * tau_1 - candidate) < abs(y * tau_1 - other_b):
                        slope, other_b = SLOPE_AHEAD, candidate
            elif before or after:
                slope = SLOPE_BEHIND
                if after:
                    slope, other_b = SLOPE_AHEAD, candidate
                if abs(y) > (h_b if along else h_a):
                    # Beside the air, but not in the source's own row.
                    way = 0.0
                    if along and closed[n + 1] == CLOSED:
                        back = -1 if behind else 1
                        above, above_1 = j0 - surface[i0], j0 - surface[i0 + back]
                        above_2 = j0 - surface[i0 + 2 * back]
                        way = _creep(h_a, h_b * above, h_b * above_1, h_b * above_2)
                    elif not along and behind and closed[n - stride] != closed[n + stride]:
                        back = -1 if closed[n - stride] == CLOSED else 1
                        if PAD <= i0 + back < n_rows - PAD:
                            rise = h_b * (surface[i0] - surface[i0 + back])
                            way = rise / np.hypot(h_a, rise)
                    # Along no way at all nothing would be left to take derivatives of.
                    if way > 1e-6:
                        slight = np.inf
                        field[n, 1] = (b + (s_r if c > 0.0 else -s_r) * way) / a
                        least = time = field[n, 1] * np.sqrt(square)
                    else:
                        slope = NOTHING
            if slope != NOTHING and min(abs(y * tau_1 - other_b), abs(other_b)) <= slight:
                p = a * a + y * y
                q = a * b + y * other_b
                inner = q * q - p * (b * b + other_b * other_b - s_r * s_r)
                if inner > 0.0:
                    tau = (q + np.sqrt(inner)) / p
                    candidate = tau * np.sqrt(square)
                    if candidate >= least:
                        time = candidate
                        field[n, 1] = tau
                        code[n] = digits + BASE * slope if along else digits + slope

        field[n, 0] = time
        place[n] = CLOSED
        order[count] = n
        count += 1

        for d in range(4):
            if d == 0:
                m, i, j = n - stride, i0 - 1, j0
            elif d == 1:
                m, i, j = n + stride, i0 + 1, j0
            elif d == 2:
                m, i, j = n - 1, i0, j0 - 1
            else:
                m, i, j = n + 1, i0, j0 + 1
            hole = place[m]
            if hole == CLOSED or code[m] == STRAIGHT:
                continue
            x_a, x_b = (i - source_a) * h_a, (j - source_b) * h_b
            square = x_a * x_a + x_b * x_b
            distance = np.sqrt(square)
            s_r = slow[m] * distance

            before, after = field[m - stride, 0], field[m + stride, 0]
            kind_a, t_a, step, c = BEHIND, before, -stride, square * over_a
            if after < before:
                kind_a, t_a, step, c = AHEAD, after, stride, -c
            a_a = b_a = sign_a = 0.0
            if t_a < np.inf:
                sign_a = s_r if c > 0.0 else -s_r
                if field[m + 2 * step, 0] <= t_a:
                    kind_a += 1
                    a_a = 1.5 * c + x_a
                    b_a = c * (2.0 * field[m + step, 1] - 0.5 * field[m + 2 * step, 1])
                else:
                    a_a = c + x_a
                    b_a = c * field[m + step, 1]
            else:
                kind_a = NOTHING

            before, after = field[m - 1, 0], field[m + 1, 0]
            kind_b, t_b, step, c = BEHIND, before, -1, square * over_b
            if after < before:
                kind_b, t_b, step, c = AHEAD, after, 1, -c
            a_b = b_b = sign_b = 0.0
            if t_b < np.inf:
                sign_b = s_r if c > 0.0 else -s_r
                if field[m + 2 * step, 0] <= t_b:
                    kind_b += 1
                    a_b = 1.5 * c + x_b
                    b_b = c * (2.0 * field[m + step, 1] - 0.5 * field[m + 2 * step, 1])
                else:
                    a_b = c + x_b
                    b_b = c * field[m + step, 1]
            else:
                kind_b = NOTHING

            tau = np.inf
            if kind_a != NOTHING and kind_b != NOTHING:
                p = a_a * a_a + a_b * a_b
                q = a_a * b_a + a_b * b_b
                inner = q * q - p * (b_a * b_a + b_b * b_b - s_r * s_r)
                if inner > 0.0:
                    tau = (q + np.sqrt(inner)) / p
                    # Neighbours that are later than the result cannot have led to it.
                    if tau * distance < max(t_a, t_b):
                        tau = np.inf
            if tau == np.inf:
                tau = (b_a + sign_a) / a_a if kind_a != NOTHING else np.inf
                other_tau = (b_b + sign_b) / a_b if kind_b != NOTHING else np.inf
                if other_tau < tau:
                    tau = other_tau
                    kind_a = NOTHING
                else:
                    kind_b = NOTHING
            time = tau * distance
            if hole == FAR:
                hole = size
                size += 1
            elif time >= keys[hole]:
                continue
            field[m, 1] = tau
            code[m] = kind_a + BASE * kind_b
            while hole > 0:
                parent = (hole - 1) >> 2
                if keys[parent] <= time:
                    break
                keys[hole] = keys[parent]
                heap[hole] = heap[parent]
                place[heap[hole]] = hole
                hole = parent
            keys[hole] = time
            heap[hole] = m
            place[m] = hole
    return count
