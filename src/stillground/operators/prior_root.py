"""Square root of a Matérn-type prior covariance on a nodal grid as a `pylops.LinearOperator`."""

from __future__ import annotations

import math
from collections import defaultdict
from collections.abc import Sequence
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray
from pylops import LinearOperator
from scipy.fft import dctn
from scipy.special import gamma

from stillground.errors import GridError
from stillground.grid import Grid
from stillground.kernels.blocks import n_threads
from stillground.quadrature import TRAPEZOID, Quadrature

Array = NDArray[np.float64]

_WORTH_THREADS = 200_000


class PriorRoot(LinearOperator):
    """From unit-variance cosine coefficients to a nodal field with a Matérn-type covariance.

    The covariance is that of ``(I - div(l^2 grad))^(-s)`` with no flux through the edges of the
    grid, scaled to the variance asked for at points some correlation lengths away from them. For
    ``s <= n_dimensions / 2`` values at points have no variance; the scale is then that of
    ``s = n_dimensions / 2 + 1``, so that long waves keep theirs (an iteration without damping does
    not depend on it).

    Parameters
    ----------
    grid : Grid
    correlation : sequence of float, length n_dimensions
        Correlation lengths l along the axes, m.
    smoothness : float
        s, at least 0; 0 is white.
    deviation : float
        Standard deviation at points, in the unit of the ground property.

    Raises
    ------
    GridError
        When a length is not positive or the smoothness is negative.

    Notes
    -----
    With D the orthogonal cosine transform on nodes (DCT-I; its own transpose), w the quadrature
    weights, kappa the wavenumbers of the modes and v the deviation:

    .. math::
        m = w^{-1/2} D f x, \\qquad x = f D w^{-1/2} m, \\qquad
        f = \\sigma \\left(1 + \\sum_i l_i^2 \\kappa_i^2\\right)^{-s/2}, \\qquad
        \\sigma^2 = v^2 (4 \\pi)^{d/2} \\frac{\\Gamma(s)}{\\Gamma(s - d/2)} \\prod_i l_i

    The weights make the coefficients those of functions and not of vectors: the covariance at fixed
    points does not depend on the grid.

    With other weights than the trapezoid's the cosines at the nodes are not orthogonal in
    ``w^{1/2}``. They are made so, long waves first (Gram and Schmidt), and D is what they become: a long
    wave stays what it is, since a rule that is repeated in P panels takes it only for waves of at least P
    half periods. Storage and products then go with the square of the nodes along an axis.

    On a grid that is not ``weighted`` L is the deviation alone: independent values at the nodes.

    References
    ----------
    Whittle (1954), On stationary processes in the plane, Biometrika 41. Lindgren, Rue & Lindström
    (2011), An explicit link between Gaussian fields and Gaussian Markov random fields, J. R. Stat.
    Soc. B 73.
    """

    def __init__(
        self, grid: Grid, correlation: Sequence[float], smoothness: float, deviation: float = 1.0
    ) -> None:
        if len(correlation) != len(grid.shape) or not all(0 < length < math.inf for length in correlation):
            raise GridError(f"one positive correlation length for each axis is needed; got {correlation}")
        if not 0 <= smoothness < math.inf:
            raise GridError(f"the smoothness must be a number from 0 up; got {smoothness}")
        half = len(grid.shape) / 2
        s = smoothness if smoothness > half else half + 1
        variance = (4 * math.pi) ** half * gamma(s) / gamma(s - half) * math.prod(correlation)
        squares = [
            (length * np.pi / extent * np.arange(n)) ** 2
            for length, extent, n in zip(correlation, grid.lengths, grid.shape, strict=True)
        ]
        symbol = 1.0 + sum(np.meshgrid(*squares, indexing="ij", sparse=True))
        self._factor = (deviation * math.sqrt(variance) * symbol ** (-smoothness / 2))[..., None]
        self._root = (grid.weights() ** -0.5).reshape(*grid.shape, 1)
        self._axes = tuple(range(len(grid.shape)))
        self._waves: tuple[Array, ...] | None = None
        if not grid.weighted:
            self._factor = np.full_like(self._factor, deviation)
            self._root = np.ones_like(self._root)
            self._waves = ()
        elif grid.rule != TRAPEZOID:
            self._waves = tuple(_waves(grid.rule, n) for n in grid.shape)
        super().__init__(dtype=np.dtype(np.float64), dims=(grid.n_nodes,), dimsd=(grid.n_nodes,))

    def _to_nodes(self, coefficients: Array) -> Array:
        if self._waves is None:
            return self._cosines(coefficients)
        return self._along(coefficients, self._waves)

    def _to_coefficients(self, field: Array) -> Array:
        if self._waves is None:
            return self._cosines(field)
        return self._along(field, tuple(waves.T for waves in self._waves))

    def _cosines(self, field: Array) -> Array:
        workers = n_threads() if field.size > _WORTH_THREADS else 1
        transformed = dctn(field, type=1, axes=self._axes, norm="ortho", overwrite_x=True, workers=workers)
        return np.asarray(transformed)

    @staticmethod
    def _along(field: Array, matrices: tuple[Array, ...]) -> Array:
        for axis, matrix in enumerate(matrices):
            field = np.moveaxis(np.tensordot(matrix, field, (1, axis)), 0, axis)
        return field

    def _matmat(self, X: Array) -> Array:
        field = self._factor * X.reshape(*self._root.shape[:-1], -1)
        return np.asarray((self._root * self._to_nodes(field)).reshape(X.shape))

    def _rmatmat(self, X: Array) -> Array:
        field = self._root * X.reshape(*self._root.shape[:-1], -1)
        return np.asarray((self._factor * self._to_coefficients(field)).reshape(X.shape))

    def inverse(self, ground: Array) -> Array:
        """Coefficients (n_nodes, n_columns) that give nodal fields (n_nodes, n_columns): exact."""
        field = ground.reshape(*self._root.shape[:-1], -1) / self._root
        return np.asarray((self._to_coefficients(field) / self._factor).reshape(ground.shape))

    def _matvec(self, x: Array) -> Array:
        return self._matmat(x.reshape(-1, 1)).reshape(-1)

    def _rmatvec(self, x: Array) -> Array:
        return self._rmatmat(x.reshape(-1, 1)).reshape(-1)


@lru_cache(maxsize=8)
def _waves(rule: Quadrature, n: int) -> Array:
    """Orthogonal matrix (n, n): cosines at a rule's nodes times the roots of its weights, long waves first.

    In P panels of nodes that lie symmetrically, the rule tells waves k and k' apart, as orthogonal ones,
    unless k + k' or k - k' is a multiple of 2 P: there is nothing to take out of a wave but these few.
    """
    intervals = rule.n_intervals(n)
    period = 2 * intervals // rule.intervals
    waves = np.cos(np.pi * np.outer(np.arange(n), rule.nodes(n) / intervals)) * np.sqrt(rule.weights(n))
    confused: defaultdict[int, list[Array]] = defaultdict(list)
    for k, wave in enumerate(waves):
        longer = confused[min(k % period, -k % period)]
        for other in longer:
            wave -= (other @ wave) * other
        wave /= np.linalg.norm(wave)
        longer.append(wave)
    waves.flags.writeable = False
    return waves.T
