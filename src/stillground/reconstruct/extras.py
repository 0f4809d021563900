"""Unknowns beside the ground that any measurement may have, and the ground's size beside theirs."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from typing import TypeVar

import numpy as np
from pylops import LinearOperator
from scipy.linalg import orth

from stillground.errors import ConfigError
from stillground.protocols import Array, Extra, Measurement, NonlinearMeasurement

Measured = TypeVar("Measured", bound=Measurement | NonlinearMeasurement)

# Wide against any delay that would not be seen at once, and still narrower than the data.
_DELAY_SHARE = 0.1
_LEAST_SIGNAL = 0.05
_PROBES = 64


def beside(measurement: Measurement | NonlinearMeasurement, found: Mapping[str, Array]) -> Array:
    """What extra unknowns of these values add to the data, shape (n_data,)."""
    total = np.zeros_like(measurement.data)
    for extra in measurement.extras:
        total += extra.response @ found[extra.name]
    return total


def with_statics(measurement: Measured, statics: Mapping[str, float], units: str) -> Measured:
    """Adds one constant for every source, receiver or other group, with a prior.

    Parameters
    ----------
    measurement : Measurement or NonlinearMeasurement
    statics : mapping of str to float
        Grouping to prior standard deviation in units of the median error.
    units : str
        Of the data.

    Raises
    ------
    ConfigError
        When the measurement has no such grouping.

    Notes
    -----
    A misjudged deviation is forgiving. Projecting the constants out instead would take layered ground
    with them, which *is* a constant for each group.
    """
    extras = list(measurement.extras)
    for name, size in statics.items():
        if name not in measurement.groupings:
            raise ConfigError(
                f"errors.statics: there are no groups by '{name}'; there are "
                f"{', '.join(measurement.groupings) or 'none'}"
            )
        group = measurement.groupings[name]
        response = np.zeros((group.size, int(group.max()) + 1))
        response[np.arange(group.size), group] = 1.0
        deviation = size * float(np.median(measurement.errors))
        extras.append(Extra(f"{name}_static", response, deviation, units))
    return replace(measurement, extras=tuple(extras))


def with_delay(measurement: Measured, units: str) -> Measured:
    """Adds one constant common to all data, such as a trigger delay."""
    response = np.ones((measurement.data.size, 1))
    deviation = _DELAY_SHARE * float(np.median(np.abs(measurement.data)))
    return replace(measurement, extras=(*measurement.extras, Extra("delay", response, deviation, units)))


def ground_deviation(measurement: Measurement, root: LinearOperator, background: Array) -> float:
    """Standard deviation of the ground that makes the data as large as they are; 0 where they do not tell.

    Extra unknowns have a deviation of their own, so the ground needs a true one: one far too large, and
    the ground takes first what belongs to them.

    Parameters
    ----------
    measurement : Measurement
    root : pylops.LinearOperator, shape (n_nodes, n_nodes)
        Of a prior of deviation 1.
    background : array, shape (n_nodes,)

    Notes
    -----
    With P the projection of whitened data on what neither a constant nor an extra unknown common to all
    data explains, E S the other extras, and b the whitened data less the background, on average
    ``|P b|^2 = deviation^2 |P A_s|^2 + |P E S|^2 + rank P``; the norm of ``P A_s`` by random signs
    (Hutchinson 1990, Commun. Stat. Simul. Comput. 19), the same on every grid.
    """
    operator, errors = measurement.operator, measurement.errors[:, None]
    constant = operator.matvec(np.ones(operator.shape[1]))
    whitened = [extra.response * extra.deviation / errors for extra in measurement.extras]
    common = [response for response in whitened if response.shape[1] == 1]
    explained = np.hstack([constant[:, None] / errors, *common])
    basis = orth(explained / np.maximum(np.linalg.norm(explained, axis=0), np.finfo(float).tiny))
    b = (measurement.data - operator.matvec(background))[:, None] / errors
    signs = np.random.default_rng(0).choice([-1.0, 1.0], size=(errors.size, _PROBES))
    left, probes, *others = (
        values - basis @ (basis.T @ values)
        for values in (b, signs, *(response for response in whitened if response.shape[1] > 1))
    )
    n_left = errors.size - basis.shape[1]
    expected = n_left + sum(float(np.sum(response**2)) for response in others)
    signal = max(float(np.sum(left**2)) - expected, _LEAST_SIGNAL * n_left)
    size = float(np.sum(np.square(root.rmatmat(operator.rmatmat(probes / errors))))) / _PROBES
    return float(np.sqrt(signal / size)) if n_left > 0 and size > 0 else 0.0
