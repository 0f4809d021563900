"""Described grounds in closed form: a background and bodies, with exact integrals along rays.

No grid takes part, so data made from a described ground are independent of the grid of any
reconstruction. Points have shape (n, d) with d = 1, 2 or 3, in m, elevation last; the property is
in SI. A body is its ``excess`` times a shape that is 1 at its centre.
"""

from __future__ import annotations

import math
from abc import ABC, abstractmethod
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import erf, erfc

from stillground.errors import ConfigError

Array = NDArray[np.float64]

# Below this length, in standard deviations, eight Gauss points are exact to rounding, where the
# difference of two error functions would lose the digits that they share.
SHORT = 0.1
GAUSS_NODES, GAUSS_WEIGHTS = np.polynomial.legendre.leggauss(8)


@dataclass(frozen=True)
class Body(ABC):
    """Something that differs from the background.

    Parameters
    ----------
    excess : float
        Value at the centre minus background, in the property's unit.
    """

    excess: float

    def __post_init__(self) -> None:
        _require(math.isfinite(self.excess), self, "a finite excess", self.excess)

    @abstractmethod
    def shape(self, points: Array) -> Array:
        """The body for an excess of 1 at ``points``, shape (n, d) to (n,)."""

    @abstractmethod
    def mean_shape(self, starts: Array, ends: Array) -> Array:
        """Mean of ``shape`` along straight segments, shapes (n, d) to (n,); finite at length 0."""

    @abstractmethod
    def cuts(self, places: Array) -> Array:
        """Elevations between which the body is smooth below ``places`` in plan, (n, d - 1) to (n, m).

        They are its edges; of a body without edges they are so near each other that a few Gauss points
        between two of them are exact to rounding. They may be infinite.
        """

    def values(self, points: Array) -> Array:
        """Difference from the background at ``points``, shape (n, d) to (n,)."""
        return self.excess * self.shape(points)

    def line_integrals(self, starts: Array, ends: Array) -> Array:
        """Integral of the difference by arc length along straight segments, shapes (n, d) to (n,).

        In the property's unit times m; 0 for a segment of no length.
        """
        return self.excess * _lengths(starts, ends) * self.mean_shape(starts, ends)


@dataclass(frozen=True)
class Centred(Body):
    """A body about a centre whose shape depends on sum_i ((x_i - centre_i) / radii_i)^2 alone.

    Parameters
    ----------
    excess : float
    centre : tuple of float, length d, m
    radii : tuple of float, length d, m
        Positive; infinite along an axis on which the body has no end.
    """

    centre: tuple[float, ...]
    radii: tuple[float, ...]

    def __post_init__(self) -> None:
        super().__post_init__()
        both = f"{self.centre} and {self.radii}"
        _require(len(self.centre) == len(self.radii), self, "as many radii as centre coordinates", both)
        _require(all(map(math.isfinite, self.centre)), self, "a finite centre", self.centre)
        _require(all(radius > 0 for radius in self.radii), self, "positive radii", self.radii)

    def _scaled(self, points: Array) -> Array:
        _require_axes(self, points, len(self.centre))
        return np.asarray((points - np.array(self.centre)) / np.array(self.radii))

    def _along(self, starts: Array, ends: Array) -> tuple[Array, Array, Array]:
        """In scaled coordinates: place along its line of each segment's middle, from the point of the
        line nearest to the centre; length of the segment; distance of the line from the centre."""
        first, last = self._scaled(starts), self._scaled(ends)
        middle, width = 0.5 * (first + last), _lengths(first, last)
        direction = (last - first) / np.where(width > 0, width, 1.0)[:, None]
        place = np.sum(middle * direction, axis=1)
        return place, width, np.linalg.norm(middle - place[:, None] * direction, axis=1)


@dataclass(frozen=True)
class Blob(Centred):
    """A Gaussian, exp(-1/2 sum_i ((x_i - centre_i) / radii_i)^2): radii are standard deviations.

    Notes
    -----
    In coordinates scaled by the radii let a segment have length w and its middle lie at s from the
    point of its line nearest to the centre, at distance p. The mean is
    exp(-p^2/2) sqrt(pi/2) / w [erf((s + w/2)/sqrt 2) - erf((s - w/2)/sqrt 2)].

    Examples
    --------
    >>> blob = Blob(excess=1.0, centre=(0.0, 0.0), radii=(1.0, 1.0))
    >>> blob.line_integrals(np.array([[-50.0, 0.0]]), np.array([[50.0, 0.0]])) / np.sqrt(2 * np.pi)
    array([1.])
    """

    def shape(self, points: Array) -> Array:
        return np.asarray(np.exp(-0.5 * np.sum(self._scaled(points) ** 2, axis=1)))

    def mean_shape(self, starts: Array, ends: Array) -> Array:
        place, width, distance = self._along(starts, ends)
        place = np.abs(place)
        low, high = (place - width / 2) / math.sqrt(2), (place + width / 2) / math.sqrt(2)
        # With both ends on one side erf is nearly 1 at both, and erfc keeps the digits.
        difference = np.where(low > 0, erfc(low) - erfc(high), erf(high) - erf(low))
        long = math.sqrt(math.pi / 2) * difference / np.maximum(width, SHORT)
        nodes = place[:, None] + 0.5 * np.minimum(width, SHORT)[:, None] * GAUSS_NODES
        short = 0.5 * np.exp(-0.5 * nodes**2) @ GAUSS_WEIGHTS
        return np.asarray(np.exp(-0.5 * distance**2) * np.where(width < SHORT, short, long))

    def cuts(self, places: Array) -> Array:
        levels = self.centre[-1] + self.radii[-1] * np.arange(-8.5, 9.0)
        return np.broadcast_to(levels, (len(places), levels.size))


@dataclass(frozen=True)
class Disc(Centred):
    """Constant inside an ellipse, sum_i ((x_i - centre_i) / radii_i)^2 < 1 (an ellipsoid in 3-D).

    Notes
    -----
    In coordinates scaled by the radii a line at distance p from the centre is inside over the
    chord 2 sqrt(1 - p^2); the mean is the share of the segment on it.
    """

    def shape(self, points: Array) -> Array:
        return np.where(np.sum(self._scaled(points) ** 2, axis=1) < 1, 1.0, 0.0)

    def mean_shape(self, starts: Array, ends: Array) -> Array:
        place, width, distance = self._along(starts, ends)
        half_chord = np.sqrt(np.maximum((1 - distance) * (1 + distance), 0))[:, None]
        low, high = (place - width / 2)[:, None], (place + width / 2)[:, None]
        return _share_inside(low, high, -half_chord, half_chord)

    def cuts(self, places: Array) -> Array:
        aside = (places - np.array(self.centre[:-1])) / np.array(self.radii[:-1])
        half = np.sqrt(np.maximum(1 - np.sum(aside**2, axis=1), 0))[:, None]
        # An ellipse without end upright has no edges there, and beside an ellipse there are none.
        reach = np.where(half > 0, self.radii[-1] * np.maximum(half, 1e-300), 0.0)
        return np.asarray(self.centre[-1] + reach * [-1.0, 1.0])


@dataclass(frozen=True)
class Box(Body):
    """Constant inside an axis-aligned box: lower_i <= x_i < upper_i on every axis.

    The mean is the share of the segment between the latest entry into and the first exit from the
    slabs of the axes.

    Parameters
    ----------
    excess : float
    lower, upper : tuple of float, length d, m
        May be infinite.
    """

    lower: tuple[float, ...]
    upper: tuple[float, ...]

    def __post_init__(self) -> None:
        super().__post_init__()
        both = f"{self.lower} and {self.upper}"
        _require(len(self.lower) == len(self.upper), self, "lower and upper of equal length", both)
        ordered = all(low < high for low, high in zip(self.lower, self.upper, strict=True))
        _require(ordered, self, "lower below upper on every axis", both)

    def shape(self, points: Array) -> Array:
        _require_axes(self, points, len(self.lower))
        inside = (points >= np.array(self.lower)) & (points < np.array(self.upper))
        return np.where(inside.all(axis=1), 1.0, 0.0)

    def mean_shape(self, starts: Array, ends: Array) -> Array:
        _require_axes(self, starts, len(self.lower))
        return _share_inside(starts, ends, np.array(self.lower), np.array(self.upper))

    def cuts(self, places: Array) -> Array:
        return np.broadcast_to([self.lower[-1], self.upper[-1]], (len(places), 2))


@dataclass(frozen=True)
class Layer(Body):
    """Constant between two parallel planes: bottom <= z - dip x < top, x along the first axis.

    The mean is the share of the segment between the planes.

    Parameters
    ----------
    excess : float
    bottom, top : float, m
        Elevations at x = 0; may be infinite.
    dip : float
        Slope dz/dx; 0 in one dimension.
    """

    bottom: float
    top: float
    dip: float = 0.0

    def __post_init__(self) -> None:
        super().__post_init__()
        _require(self.bottom < self.top, self, "bottom below top", f"{self.bottom} and {self.top}")
        _require(math.isfinite(self.dip), self, "a finite dip", self.dip)

    def shape(self, points: Array) -> Array:
        height = self._height(points)
        return np.where((height >= self.bottom) & (height < self.top), 1.0, 0.0)

    def mean_shape(self, starts: Array, ends: Array) -> Array:
        low, high = self._height(starts)[:, None], self._height(ends)[:, None]
        return _share_inside(low, high, np.array(self.bottom), np.array(self.top))

    def cuts(self, places: Array) -> Array:
        lift = self.dip * places[:, :1] if self.dip else np.zeros((len(places), 1))
        return np.asarray(lift + np.array([self.bottom, self.top]))

    def _height(self, points: Array) -> Array:
        if self.dip == 0:
            return points[:, -1]
        _require(points.shape[1] > 1, self, "no dip in one dimension", self.dip)
        return points[:, -1] - self.dip * points[:, 0]


@dataclass(frozen=True)
class Ground:
    """A background value and the bodies in it, added.

    Parameters
    ----------
    background : float
        In the property's unit.
    bodies : tuple of Body

    Raises
    ------
    ConfigError
        From every constructor here for a value out of range, and from ``values`` and
        ``line_integrals`` when a body has not as many coordinates as the points.

    Examples
    --------
    >>> ground = Ground(2.0, (Disc(excess=1.0, centre=(5.0, -5.0), radii=(2.0, 2.0)),))
    >>> ground.values(np.array([[5.0, -5.0], [9.0, -5.0]]))
    array([3., 2.])
    >>> ground.line_integrals(np.array([[0.0, -5.0]]), np.array([[10.0, -5.0]]))
    array([24.])
    """

    background: float
    bodies: tuple[Body, ...] = ()

    def __post_init__(self) -> None:
        _require(math.isfinite(self.background), self, "a finite background", self.background)

    def values(self, points: Array) -> Array:
        """The property at ``points``, shape (n, d) to (n,)."""
        total = np.full(len(points), float(self.background))
        for body in self.bodies:
            total += body.values(points)
        return total

    def line_integrals(self, starts: Array, ends: Array) -> Array:
        """Exact integrals by arc length along straight segments, shapes (n, d) to (n,)."""
        total = self.background * _lengths(starts, ends)
        for body in self.bodies:
            total += body.line_integrals(starts, ends)
        return total

    def cuts(self, places: Array) -> Array:
        """The `Body.cuts` of all bodies, shape (n, d - 1) to (n, m)."""
        return np.hstack([np.empty((len(places), 0)), *(body.cuts(places) for body in self.bodies)])


def _lengths(starts: Array, ends: Array) -> Array:
    return np.asarray(np.linalg.norm(ends - starts, axis=1))


def _share_inside(starts: Array, ends: Array, lower: Array, upper: Array) -> Array:
    """Share of each segment with lower <= x < upper on every axis, shapes (n, d) to (n,)."""
    step = ends - starts
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        at_lower, at_upper = (lower - starts) / step, (upper - starts) / step
        # A segment parallel to a face is inside its slab all along or nowhere.
        never = np.where((starts >= lower) & (starts < upper), 0.0, 1.0)
        enter = np.where(step == 0, never, np.minimum(at_lower, at_upper))
        leave = np.where(step == 0, 1.0, np.maximum(at_lower, at_upper))
    return np.asarray(np.maximum(leave.min(axis=1).clip(max=1) - enter.max(axis=1).clip(min=0), 0.0))


def _require(condition: bool, described: object, wanted: str, got: object) -> None:
    if not condition:
        raise ConfigError(f"{type(described).__name__.lower()} needs {wanted}; got {got}")


def _require_axes(body: Body, points: Array, n_axes: int) -> None:
    """Without this numpy would stretch a body of one axis over all of them."""
    _require(points.shape[1] == n_axes, body, f"{points.shape[1]} coordinates, as the section", n_axes)
