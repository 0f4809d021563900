"""A ground property as people read it: the reciprocal where there is one, as velocity for slowness."""

from __future__ import annotations

from stillground.protocols import Array, GroundProperty


def read_as(seen: GroundProperty) -> tuple[str, str]:
    """Name and units of what people read, as ``velocity`` and ``m s-1`` for slowness."""
    return (seen.name, seen.units) if seen.reciprocal is None else seen.reciprocal[:2]


def shown(seen: GroundProperty, values: Array) -> tuple[Array, str, str]:
    """Values as people read them, with long name and units: the reciprocal where there is one."""
    if seen.reciprocal is None:
        return values, seen.long_name, seen.units
    _, units, long_name = seen.reciprocal
    return 1 / values, long_name, units


def shown_change(seen: GroundProperty, model: Array, change: Array) -> Array:
    """Small changes or errors of the property at its values as those of what people read.

    Examples
    --------
    >>> import numpy as np
    >>> slowness = GroundProperty("slowness", "s m-1", "slowness", ("velocity", "m s-1", "velocity"))
    >>> shown_change(slowness, np.array([1 / 2000]), np.array([5e-6]))
    array([20.])
    """
    return change if seen.reciprocal is None else change / model**2
