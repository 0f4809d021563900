"""The noise part of the error: how far the picture moves when the noise is drawn again."""

from __future__ import annotations

from collections.abc import Generator, Mapping
from itertools import islice
from types import MappingProxyType

import numpy as np

from stillground.protocols import Array, Progress
from stillground.reconstruct import Reconstruction, prepare
from stillground.solve import back

# Small against the noise, so that the iteration stays near to that of the data.
_SHARE = 0.5


def noise_part(
    reconstruction: Reconstruction,
    stop: float,
    *,
    members: int,
    seed: int,
    averages: Mapping[str, Array] = MappingProxyType({}),
) -> Generator[Progress, None, tuple[Array, dict[str, float]]]:
    """Standard deviation of the answer under the noise, at a fixed stop, in the property's unit.

    Half the noise is drawn anew on top of the data, the iteration repeated to the same stop, and the
    scatter divided by one half. The stop is never picked again: that would measure the rule.

    It is *not the error*: ground that the survey cannot see does not scatter. See `Rehearsal` for the
    total error.

    Parameters
    ----------
    reconstruction : Reconstruction
    stop : float
        Iteration on this reconstruction's grid.
    members : int
        32 give it to some 12 %.
    seed : int
    averages : mapping of str to array, shape (n_nodes,)
        Weights of means of the ground property.

    Yields
    ------
    Progress

    Returns
    -------
    array, nodal field
        A local mean over half a correlation length of the variance, its root.
    dict of str to float
        Standard deviations of the averages.
    """
    grid, method = reconstruction.grid, reconstruction.method
    whole = int(stop)
    problem = prepare(reconstruction.measurement, grid, method, products=(members + 1) * (whole + 2))
    standard = problem.standard
    noise = np.random.default_rng(seed).standard_normal((standard.b.size, members))
    columns = np.column_stack([standard.b, standard.b[:, None] + _SHARE * reconstruction.noise * noise])
    before = after = np.zeros((problem.operator.shape[1], members + 1))
    for step in islice(method.solver(problem.operator, columns), whole + 2):
        before, after = (after if step.index > whole else step.solution), step.solution
        yield Progress("noise part of the error", step.index, whole + 1)
    solutions = back(problem.operator, before + (stop - whole) * (after - before))
    grounds = problem.anomaly(solutions)
    moved = (grounds[:, 1:] - grounds[:, :1]) / _SHARE
    scatter = np.sqrt(grid.local_mean(np.mean(np.square(moved), axis=1), method.correlation))
    return scatter, {
        name: float(np.sqrt(np.mean(np.square(weights @ moved)))) for name, weights in averages.items()
    }
