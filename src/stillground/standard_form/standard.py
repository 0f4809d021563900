"""The standard form: whitened data, the prior's root with the grid's weights, nothing else to know."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np
from pylops import LinearOperator, Restriction

from stillground.protocols import Array, Integers, Measurement


class StandardOperator(LinearOperator):  # type: ignore[misc]
    """``A_s = W (A L, E S)``: from unit-variance unknowns of ground and extras to whitened data.

    Parameters
    ----------
    measurement : Measurement
    prior_root : pylops.LinearOperator, shape (n_nodes, n_nodes)
        L, an invertible square root of the prior covariance including the grid's weights.
    background : array, shape (n_nodes,)
        The prior mean m0.
    bounds : pair of float, optional
        Least and greatest value of the ground property, for `clip`.

    Notes
    -----
    W divides by the errors, E are the responses of the extras and S their prior deviations. It offers
    `stillground.protocols.RowBlocks`.
    """

    def __init__(
        self,
        measurement: Measurement,
        prior_root: LinearOperator,
        background: Array,
        bounds: tuple[float, float] | None = None,
    ) -> None:
        self.groupings: Mapping[str, Integers] = measurement.groupings
        self._measurement = measurement
        self._root = prior_root
        self._background = background
        self._bounds = bounds
        self._n_ground = prior_root.shape[1]
        self._whitening = 1.0 / measurement.errors[:, None]
        extras = [extra.response * extra.deviation for extra in measurement.extras]
        self._extras = np.hstack([np.empty((measurement.data.size, 0)), *extras])
        super().__init__(
            dtype=np.dtype(np.float64),
            dims=(self._n_ground + self._extras.shape[1],),
            dimsd=(measurement.data.size,),
        )

    def _matmat(self, X: Array) -> Array:
        ground = self._measurement.operator.matmat(self._root.matmat(X[: self._n_ground]))
        return np.asarray(self._whitening * (ground + self._extras @ X[self._n_ground :]))

    def _rmatmat(self, X: Array) -> Array:
        data = self._whitening * X
        ground = self._root.rmatmat(self._measurement.operator.rmatmat(data))
        return np.vstack([ground, self._extras.T @ data])

    def _matvec(self, x: Array) -> Array:
        return self._matmat(x.reshape(-1, 1)).reshape(-1)

    def _rmatvec(self, x: Array) -> Array:
        return self._rmatmat(x.reshape(-1, 1)).reshape(-1)

    def rows(self, index: Integers) -> LinearOperator:
        """The operator of some data only."""
        whole = self._measurement
        some = replace(
            whole,
            operator=_rows(whole.operator, index),
            data=whole.data[index],
            errors=whole.errors[index],
            groupings={name: group[index] for name, group in whole.groupings.items()},
            extras=tuple(replace(extra, response=extra.response[index]) for extra in whole.extras),
        )
        return StandardOperator(some, self._root, self._background, self._bounds)

    def clip(self, solution: Array) -> Array:
        """The solution (n_unknowns, n_columns) whose ground is the nearest one within the bounds."""
        if self._bounds is None:
            return solution
        ground = self._background[:, None] + self._root.matmat(solution[: self._n_ground])
        inside = np.clip(ground, *self._bounds) - self._background[:, None]
        return np.vstack([self._root.inverse(inside), solution[self._n_ground :]])


def _rows(operator: LinearOperator, index: Integers) -> LinearOperator:
    """Some rows of a measurement's operator: its own way, which leaves the others' work out, if any."""
    if hasattr(operator, "rows"):
        return operator.rows(index)
    return Restriction(operator.shape[0], index, dtype=operator.dtype) @ operator


@dataclass(frozen=True)
class StandardForm:
    """The pair (A_s, b) and the way back to the ground.

    ``operator`` is ``A_s = W (A L, E S)`` (n_data, n_unknowns) and ``b = W (d - A m0)`` (n_data,): data
    have unit errors, unknowns unit prior variance.
    """

    operator: StandardOperator
    b: Array
    prior_root: LinearOperator
    background: Array
    measurement: Measurement

    def ground(self, solution: Array) -> Array:
        """The ground property of a solution: ``m0 + L x``, flattened, shape (n_nodes,)."""
        n_ground = self.prior_root.shape[1]
        return np.asarray(self.background + self.prior_root.matvec(solution[:n_ground]))

    def extras(self, solution: Array) -> dict[str, Array]:
        """The extra unknowns of a solution by name, in their units."""
        found, start = {}, self.prior_root.shape[1]
        for extra in self.measurement.extras:
            stop = start + extra.response.shape[1]
            found[extra.name] = extra.deviation * solution[start:stop]
            start = stop
        return found


def standard_form(
    measurement: Measurement,
    prior_root: LinearOperator,
    background: Array,
    bounds: tuple[float, float] | None = None,
) -> StandardForm:
    """Brings a linear measurement to standard form.

    Parameters
    ----------
    measurement, prior_root, background, bounds
        As in `StandardOperator`.
    """
    operator = StandardOperator(measurement, prior_root, background, bounds)
    residual = measurement.data - measurement.operator.matvec(background)
    return StandardForm(operator, residual / measurement.errors, prior_root, background, measurement)
