"""``<profile>_ladder.nc``: the answer on every rung, and how far it moved between them."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import xarray as xr

from stillground.products.netcdf import write_netcdf
from stillground.products.provenance import Provenance, argument
from stillground.products.raster import Surface, coordinates, ground, map_variable
from stillground.protocols import Field, Result, Rung


def rung_spacing(rung: Rung) -> float:
    """The one number that a rung goes by: its largest node spacing, m."""
    return max(rung.spacing)


def ladder_dataset(
    name: str, result: Result, *, surface: Surface | None, tolerance: float, provenance: Provenance
) -> xr.Dataset:
    """The ladder as a dataset, rungs coarse to fine.

    Parameters
    ----------
    name : str
        Of the profile.
    result : Result
    surface : pair of arrays (distance, elevation), m, or None
        Rungs are NaN above it.
    tolerance : float
        Of the refinement, relative to the anomaly.
    provenance : Provenance

    Returns
    -------
    xarray.Dataset
        ``<property>_rung_<i>(elevation_<i>, distance_<i>)``; over ``rung`` ``spacing``, ``nodes``
        and ``iteration`` (NaN where the rule found none); over ``step``, from a rung to the next,
        ``change``; the scalars ``order``, ``expected``, ``remaining``, ``pick_drift``, ``jitter``, ``index``,
        ``index_order`` and ``index_extrapolated`` (NaN where untold), ``tolerance``, ``verdict``,
        ``verdict_reason``, ``index_reason`` (empty where the index is told) and ``notes``.
    """
    seen, ladder = result.property, result.ladder
    verdict = ladder.verdict
    variables: dict[str, xr.Variable] = {}
    axes: dict[str, xr.Variable] = {}
    for i, rung in enumerate(ladder.rungs):
        axes |= coordinates(rung.axes, f"_{i}")
        picture = Field(
            f"{seen.name}_rung_{i}",
            rung.model,
            seen.units,
            f"{seen.long_name} at a spacing of {rung_spacing(rung):g} m",
        )
        variables[picture.name] = map_variable(
            picture, ground(rung.axes, surface), {"coverage_content_type": "modelResult"}, f"_{i}"
        )

    rungs = ladder.rungs
    axes["rung"] = xr.Variable(
        "rung", np.arange(len(rungs), dtype=np.int32), {"long_name": "rung, coarse to fine", "units": "1"}
    )
    spacings = np.array([rung_spacing(rung) for rung in rungs], dtype=np.float32)
    variables["spacing"] = xr.Variable("rung", spacings, {"long_name": "largest node spacing", "units": "m"})
    variables["nodes"] = xr.Variable(
        "rung", np.array([rung.n_nodes for rung in rungs], dtype=np.int32), _count("nodes of the rung")
    )
    variables["iteration"] = _number("rung", [rung.iteration for rung in rungs], "the rung's own pick")
    variables["change"] = _number("step", list(ladder.change), "relative L2 change from a rung to the next")
    for label, value, long_name in (
        ("order", verdict.order, "observed order of convergence"),
        ("expected", verdict.expected, "order of convergence that theory expects, 0 without a limit"),
        ("remaining", verdict.remaining, "relative change that further refinement would still bring"),
        ("pick_drift", ladder.pick_drift, "relative change between the picks of the last two rungs"),
        ("jitter", ladder.jitter, "relative change that rounding in the iteration makes by itself"),
        ("index", ladder.index.index, "grid convergence index of the rms anomaly on the finest rung"),
        ("index_order", ladder.index.order, "observed order of the rms anomaly"),
        ("tolerance", tolerance, "relative change that counts as none"),
    ):
        variables[label] = _number((), value, long_name)
    extrapolated = _number((), ladder.index.extrapolated, "rms anomaly extrapolated to no spacing at all")
    variables["index_extrapolated"] = extrapolated
    extrapolated.attrs["units"] = seen.units
    for label, text, long_name in (
        ("verdict", verdict.word, "whether the answer depends on the grid"),
        ("verdict_reason", verdict.reason, "why"),
        ("index_reason", ladder.index.reason or "", "why there is no grid convergence index"),
        ("notes", "; ".join(ladder.notes), "what of all this does not fit together"),
    ):
        variables[label] = xr.Variable((), text, {"long_name": long_name})
    summary = (
        f"Answers of profile {name} on {len(rungs)} grids, coarse to fine, at equal iteration. "
        f"Dependence on the grid: {verdict.word}."
    )
    return xr.Dataset(variables, axes, provenance.attributes(summary) | argument(result))


def write_ladder(folder: Path, name: str, dataset: xr.Dataset) -> Path:
    """Write ``<name>_ladder.nc`` into ``folder``; `OutputError` when the place cannot be written."""
    path = folder / f"{name}_ladder.nc"
    write_netcdf(dataset, path)
    return path


def _number(dims: str | tuple[()], value: float | list[float | None] | None, long_name: str) -> xr.Variable:
    # None becomes NaN: float32 is how numpy spells both.
    return xr.Variable(dims, np.array(value, dtype=np.float32), _count(long_name))


def _count(long_name: str) -> dict[str, str]:
    return {"long_name": long_name, "units": "1"}
