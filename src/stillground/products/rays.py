"""The ways of bent rays as products keep them: thinned, and back from the file of the iteration."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import xarray as xr

from stillground.protocols import Array

# Corners kept of a ray: more than eyes tell apart on a screen.
_MOST = 48
# Rays drawn: more would hide the ground, and make files large.
_MOST_DRAWN = 400


def thinned(ray: Array) -> Array:
    """A ray by some of its corners, both ends among them.

    Examples
    --------
    >>> thinned(np.arange(500.0)[:, None] * [1, -1]).shape
    (48, 2)
    """
    if len(ray) <= _MOST:
        return ray
    return np.asarray(ray[np.linspace(0, len(ray) - 1, _MOST).round().astype(int)])


def drawn_rays(rays: Sequence[Array]) -> list[Array]:
    """What pictures show: rays that were found, thinned, and of many every so many.

    Examples
    --------
    >>> ray = np.array([[0.0, 0.0], [5.0, -2.0], [10.0, 0.0]])
    >>> [len(drawn_rays(rays)) for rays in ([], [ray, ray[:0]], [ray] * 1000)]
    [0, 1, 334]
    """
    found = [ray for ray in rays if len(ray) > 1]
    return [thinned(ray) for ray in found[:: -(-len(found) // _MOST_DRAWN) or 1]]


def ray_variables(rays: Sequence[Array]) -> dict[str, xr.Variable]:
    """The rays of all data over ``ray_node``, ``ray_node_count`` of each; nothing where there are none."""
    if not rays:
        return {}
    kept = [thinned(ray) for ray in rays]
    counts = np.array([len(ray) for ray in kept], dtype=np.int32)
    nodes = np.vstack(kept).astype(np.float32)
    said = {"units": "m"}
    return {
        "ray_node_count": xr.Variable(
            "ray", counts, {"long_name": "corners kept of the ray of a datum", "units": "1"}
        ),
        "ray_distance": xr.Variable(
            "ray_node", nodes[:, 0], {"long_name": "distance of a corner along the profile", **said}
        ),
        "ray_elevation": xr.Variable("ray_node", nodes[:, 1], {"long_name": "elevation of a corner", **said}),
    }


def rays_of(history: xr.Dataset) -> tuple[Array, ...]:
    """What `ray_variables` kept, one array of shape (n_nodes, 2) a datum; none where there is nothing."""
    if "ray_node_count" not in history:
        return ()
    nodes = np.column_stack([history[f"ray_{axis}"].to_numpy() for axis in ("distance", "elevation")])
    ends = np.cumsum(history["ray_node_count"].to_numpy())[:-1]
    return tuple(np.split(nodes.astype(np.float64), ends))
