"""Square root of a Matérn-type prior covariance on a nodal grid as a `pylops.LinearOperator`."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray
from pylops import LinearOperator
from scipy.fft import dctn
from scipy.special import gamma

from stillground.errors import GridError
from stillground.grid import Grid
from stillground.kernels.blocks import n_threads

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
        super().__init__(dtype=np.dtype(np.float64), dims=(grid.n_nodes,), dimsd=(grid.n_nodes,))

    def _transform(self, field: Array) -> Array:
        workers = n_threads() if field.size > _WORTH_THREADS else 1
        transformed = dctn(field, type=1, axes=self._axes, norm="ortho", overwrite_x=True, workers=workers)
        return np.asarray(transformed)

    def _matmat(self, X: Array) -> Array:
        field = self._factor * X.reshape(*self._root.shape[:-1], -1)
        return np.asarray((self._root * self._transform(field)).reshape(X.shape))

    def _rmatmat(self, X: Array) -> Array:
        field = self._root * X.reshape(*self._root.shape[:-1], -1)
        return np.asarray((self._factor * self._transform(field)).reshape(X.shape))

    def inverse(self, ground: Array) -> Array:
        """Coefficients (n_nodes, n_columns) that give nodal fields (n_nodes, n_columns): exact."""
        field = ground.reshape(*self._root.shape[:-1], -1) / self._root
        return np.asarray((self._transform(field) / self._factor).reshape(ground.shape))

    def _matvec(self, x: Array) -> Array:
        return self._matmat(x.reshape(-1, 1)).reshape(-1)

    def _rmatvec(self, x: Array) -> Array:
        return self._rmatmat(x.reshape(-1, 1)).reshape(-1)
