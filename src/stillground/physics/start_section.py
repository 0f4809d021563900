"""Velocity of an earlier section as the start of curved rays."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from scipy.interpolate import RegularGridInterpolator

from stillground.grid import Grid
from stillground.protocols import Array


@dataclass(frozen=True)
class StartSection:
    """Velocities at the nodes of an earlier section, bilinear in their logarithm and constant beyond.

    Parameters
    ----------
    distance, elevation : array, m
        Ascending.
    velocities : array, shape (n_distance, n_elevation), m/s
    fact : str
        Where it comes from.
    """

    distance: Array
    elevation: Array
    velocities: Array
    fact: str

    def others(self) -> dict[str, StartSection]:
        """Two others that one might have taken, by what they are beside this one."""
        return {
            "a quarter slower": replace(self, velocities=0.75 * self.velocities),
            "a quarter faster": replace(self, velocities=1.25 * self.velocities),
        }

    def log_slowness(self, grid: Grid, surface: tuple[Array, Array]) -> Array:
        """Logarithm of the slowness at the nodes of a section, shape (n_nodes,)."""
        earlier = (self.distance, self.elevation)
        within = [np.clip(axis, known[0], known[-1]) for axis, known in zip(grid.axes, earlier, strict=True)]
        nodes = np.stack(np.meshgrid(*within, indexing="ij"), axis=-1)
        return np.asarray(-RegularGridInterpolator(earlier, np.log(self.velocities))(nodes).reshape(-1))
