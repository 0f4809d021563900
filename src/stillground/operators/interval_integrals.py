"""Integrals of a nodal field of one axis over intervals as a `pylops.LinearOperator`."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from pylops import MatrixMult

from stillground.errors import GridError
from stillground.grid import Grid

Array = NDArray[np.float64]
Integers = NDArray[np.int64]


class IntervalIntegrals(MatrixMult):
    """Exact integrals of the function that is linear between its nodes, times a factor each.

    The matrix is dense: a row has entries all along its interval anyway, and a few hundred data by a few
    thousand nodes are a few megabytes.

    Parameters
    ----------
    grid : Grid
        Of one axis.
    starts, ends : array, shape (n_data,)
        In either order, inside the grid or on its edge, m.
    factors : array, shape (n_data,), optional
        What each integral is multiplied by; default 1. Along a slant path through a layered ground it
        is the true length over the vertical distance.

    Raises
    ------
    GridError
        When the grid has not one axis or an interval leaves it.

    Notes
    -----
    Forward, for a field m on the nodes with hat functions phi_j, and adjoint:

    .. math::
        d_i = f_i \\int_{z_i}^{z_i'} \\sum_j m_j \\phi_j(z) \\, dz, \\qquad
        m_j = \\sum_i f_i d_i \\int_{z_i}^{z_i'} \\phi_j(z) \\, dz

    with ``z_i < z_i'``. The integral of a hat up to z is one half plus ``u (1 - |u| / 2)``, times the
    spacing, with ``u = (z - z_j) / h`` cut to [-1, 1].

    Examples
    --------
    >>> grid = Grid(origin=(-4.0,), spacing=(1.0,), shape=(5,))
    >>> A = IntervalIntegrals(grid, np.array([0.0, -1.5]), np.array([-4.0, -2.0]))
    >>> A @ grid.axes[0]
    array([-8.   , -0.875])
    """

    def __init__(self, grid: Grid, starts: Array, ends: Array, factors: Array | None = None) -> None:
        if len(grid.shape) != 1:
            raise GridError(f"integrals over intervals need a grid of 1 axis; got {len(grid.shape)}")
        (nodes,), (spacing,) = grid.axes, grid.spacing
        low, high = np.minimum(starts, ends), np.maximum(starts, ends)
        outside = (low < nodes[0] - 1e-9 * spacing) | (high > nodes[-1] + 1e-9 * spacing)
        if outside.any():
            i = int(np.flatnonzero(outside)[0])
            raise GridError(f"interval {i} from {starts[i]} to {ends[i]} leaves the grid")

        def upto(z: Array) -> Array:
            u = np.clip((z[:, None] - nodes) / spacing, -1.0, 1.0)
            return np.asarray(spacing * u * (1 - 0.5 * np.abs(u)))

        matrix = upto(high) - upto(low)
        super().__init__(matrix if factors is None else factors[:, None] * matrix)

    def rows(self, index: Integers) -> MatrixMult:
        """The operator of some intervals only."""
        return MatrixMult(self.A[index])
