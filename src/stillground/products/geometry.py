"""Vector layers: CF-1.8 simple geometries, spelt as GIS clients read them."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any, Literal

import numpy as np
import xarray as xr
from numpy.typing import NDArray
from pyproj import CRS

from stillground.products import cf
from stillground.products.reliability import NO_DATA
from stillground.protocols import Array, Integers

# Clients read -9999 as NULL, and NaN as a number.
_FILLS = {np.float32: np.float32(-9999), np.int8: np.int8(NO_DATA)}


def layer(
    feature: str,
    kind: Literal["point", "line", "polygon"],
    nodes: tuple[Array, ...],
    fields: Mapping[str, tuple[NDArray[Any], Mapping[str, Any]]],
    *,
    counts: Integers | None = None,
    crs: CRS | None,
    named: bool = False,
) -> dict[str, xr.Variable]:
    """The variables of one layer, which clients call ``<feature>s``.

    Parameters
    ----------
    feature : str
        What one shape is; the name of the layer's dimension.
    kind : str
    nodes : tuple of two or three arrays, shape (n_nodes,)
        East, north and elevation of all nodes, in the CRS's unit, feature by feature; a polygon's rings
        are closed.
    fields : mapping of name to (values, attributes)
        Values of shape (n_features,): text, float32 with NaN for what is missing, int32, or int8 flags
        with 127.
    counts : array of integers, shape (n_features,)
        Nodes of each feature; not for points.
    crs : CRS or None
    named : bool
        Give east and north their standard names: clients stand one layer of a file that has them.
    """
    on_map = {} if crs is None else {"grid_mapping": "crs"}
    mine = feature if counts is None else f"{feature}_node"
    names = [f"{feature}_{axis}" for axis in "xyz"[: len(nodes)]]
    said = [cf.plan_attributes("easting", crs), cf.plan_attributes("northing", crs)]
    if not named:
        for attributes in said:
            attributes.pop("standard_name", None)
    said.append({**cf.COORDINATES["elevation"], "units": cf.plan_unit(crs)[0]})
    container = {"geometry_type": kind, "node_coordinates": " ".join(names)} | on_map
    variables = {
        name: xr.Variable(mine, along, attributes, {"_FillValue": None})
        for name, along, attributes in zip(names, nodes, said, strict=False)
    }
    if counts is not None:
        count = f"{feature}_node_count"
        container["node_count"] = count
        variables[count] = xr.Variable(
            feature, counts.astype(np.int32), {"long_name": f"nodes of the {feature}"}
        )
    shape = f"{feature}s"
    variables[shape] = xr.Variable((), np.int32(0), container)
    for name, (values, said_of_it) in fields.items():
        fill = next((one for dtype, one in _FILLS.items() if values.dtype == dtype), None)
        encoding = {} if fill is None else {"_FillValue": fill}
        variables[name] = xr.Variable(feature, values, {**said_of_it, "geometry": shape} | on_map, encoding)
    return variables
