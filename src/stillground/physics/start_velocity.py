"""Velocity that grows with depth alone: where curved rays begin, and what their first bends come from."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from scipy.optimize import least_squares

from stillground.grid import Grid
from stillground.percent import percent
from stillground.physics.first_arrivals import PLAUSIBLE
from stillground.protocols import Array

# Over a survey's median offset velocities grow by this share to this multiple of the surface's.
_GROWTH = (1e-4, 100.0)


@dataclass(frozen=True)
class StartVelocity:
    """Velocities at depths below the surface, linear between and constant beyond.

    Parameters
    ----------
    depths, velocities : array, shape (n,), m and m/s
    fact : str
        Where it comes from.

    Examples
    --------
    >>> start = StartVelocity(np.array([0.0, 10.0]), np.array([400.0, 900.0]), "")
    >>> start.velocity(np.array([-1.0, 4.0, 20.0]))
    array([400., 600., 900.])
    """

    depths: Array
    velocities: Array
    fact: str

    def velocity(self, depth: Array) -> Array:
        """Velocities at ``depth``, m/s; those above the surface are the surface's."""
        return np.asarray(np.interp(depth, self.depths, self.velocities))

    def others(self) -> dict[str, StartVelocity]:
        """Two others that one might have taken, by what they are beside this one."""
        slower = replace(self, velocities=0.75 * self.velocities)
        if np.ptp(self.velocities) > 0:
            return {"a quarter slower": slower, "half as steep": replace(self, depths=2 * self.depths)}
        return {
            "a quarter slower": slower,
            "a quarter faster": replace(self, velocities=1.25 * self.velocities),
        }

    def log_slowness(self, grid: Grid, surface: tuple[Array, Array]) -> Array:
        """Logarithm of the slowness at the nodes of a section, shape (n_nodes,)."""
        distance, elevation = grid.axes
        depth = np.interp(distance, *surface)[:, None] - elevation
        return -np.log(self.velocity(depth)).reshape(-1)


def constant(velocity: float, fact: str) -> StartVelocity:
    """One velocity everywhere, m/s."""
    return StartVelocity(np.zeros(1), np.array([velocity]), fact)


def fitted_velocity(times: Array, lengths: Array, depths: tuple[Array, Array]) -> StartVelocity:
    """A velocity that grows with depth down to a constant one, by the waves that fit first arrivals best.

    Parameters
    ----------
    times : array, shape (n_data,), s
    lengths : array, shape (n_data,)
        Straight distances between sources and receivers, m.
    depths : pair of array, shape (n_data,)
        Of sources and receivers below the surface, m.

    Notes
    -----
    The logarithms of the times are fitted, so that near and far picks count alike, with a loss that grows
    but linearly for those far off. No velocity is told that is faster than where the farthest wave turns.
    """
    reach = float(np.median(lengths))
    apparent = float(np.median(lengths / times))

    def parameters(fitted: Array) -> tuple[float, float, float]:
        surface, share, more = np.exp(fitted)
        return float(surface), float(share * surface / reach), float(surface * (1 + more))

    def misfit(fitted: Array) -> Array:
        return np.asarray(np.log(arrivals(lengths, depths, *parameters(fitted)) / times))

    bounds = np.log([[PLAUSIBLE[0], *_GROWTH[:1] * 2], [PLAUSIBLE[1], *_GROWTH[1:] * 2]])
    first = np.clip(np.log([apparent / 2, 1.0, 9.0]), bounds[0] + 1e-6, bounds[1] - 1e-6)
    found = least_squares(misfit, first, bounds=(bounds[0], bounds[1]), loss="soft_l1", f_scale=0.1)
    surface, growth, fastest = parameters(found.x)
    turning = float(np.hypot(surface, growth * lengths.max() / 2))
    fastest = min(fastest, turning)
    depth = (fastest - surface) / growth
    off = float(np.sqrt(np.mean(misfit(found.x) ** 2)))
    return StartVelocity(
        np.array([0.0, depth]),
        np.array([surface, fastest]),
        f"start: velocity {surface:.4g} m s-1 at the surface, growing to {fastest:.4g} m s-1 at a depth of "
        f"{depth:.3g} m, fitted to the times, which it gives to {percent(off)}",
    )


def arrivals(
    lengths: Array, depths: tuple[Array, Array], surface: float, growth: float, fastest: float
) -> Array:
    """First arrivals under level ground of velocity ``min(surface + growth depth, fastest)``, s.

    Notes
    -----
    With k the growth, a wave between velocities v1 and v2 at a straight distance X dives and takes
    ``(2 / k) arsinh(k X / (2 sqrt(v1 v2)))``; from the distance at which it turns where the velocity v ends
    to grow, ``sum_i sqrt(v^2 - v_i^2) / k``, the rest of the way is along there.

    References
    ----------
    Slotnick (1959), Lessons in Seismic Computing, Society of Exploration Geophysicists.

    Examples
    --------
    >>> ends = (np.zeros(1), np.zeros(1))
    >>> arrivals(np.array([30.0]), ends, 500.0, 1e-6, 2000.0).round(6)
    array([0.06])
    """
    ends = [np.minimum(surface + growth * depth, fastest) for depth in depths]
    diving = 2 / growth * np.arcsinh(growth * lengths / (2 * np.sqrt(ends[0] * ends[1])))
    turned = sum(np.sqrt(fastest**2 - end**2) for end in ends) / growth
    spent = sum(np.arccosh(fastest / end) for end in ends) / growth
    return np.asarray(np.where(lengths < turned, diving, spent + (lengths - turned) / fastest))
