"""``<profile>_history.nc``: every iteration's curves, every rule's pick, and the pictures kept."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from stillground.products.cf import COORDINATES
from stillground.products.netcdf import write_netcdf
from stillground.products.provenance import Provenance, argument
from stillground.products.raster import Surface, coordinates, ground, map_variable
from stillground.products.rays import ray_variables
from stillground.protocols import Array, Choice, Field, OuterSteps, Result, RuleOptions

CURVES = {
    "residual_norm": "norm of the whitened residual",
    "chi_square": "mean squared whitened residual",
    "residual_step": "norm of the change of the whitened residual since the iteration before",
    "solution_norm": "roughness: norm of the solution in standard form",
    "step_norm": "norm of the change of the solution in standard form since the iteration before",
    "gradient_norm": "norm of the normal-equation residual in standard form",
    "degrees_of_freedom": "degrees of freedom of the fit: estimated trace of the map from data to fit",
    "error_bound": "largest norm of the noise at which the step to the iteration surely helped",
    "filter_slope": "minus the slope of the residual polynomial at zero",
}


def history_dataset(
    name: str,
    result: Result,
    *,
    options: RuleOptions,
    surface: Surface | None,
    provenance: Provenance,
) -> xr.Dataset:
    """The iteration on the finest rung as a dataset.

    Parameters
    ----------
    name : str
        Of the profile.
    result : Result
    options : RuleOptions
        As the rules took them.
    surface : pair of arrays (distance, elevation), m, or None
        Pictures are NaN above it.
    provenance : Provenance

    Returns
    -------
    xarray.Dataset
        Over ``iteration`` the curves that the method has, ``gcv`` and ``whiteness_<grouping>`` among them.
        Over ``rule`` ``picked_iteration`` (NaN where the rule found none), ``firm``, ``reason``, and of the
        iteration where the rule's picture is taken ``shown_iteration``, ``shown_chi_square``,
        ``shown_roughness`` and ``shown_distance``. The property as
        ``<property>_at_pick(rule, elevation, distance)`` and
        ``<property>_at_iteration(kept_iteration, elevation, distance)``. The scalars ``noise`` and
        ``target_chi_square``, what the misfit is asked to fall to. Unknowns
        beside the ground by their names: a lone one is a scalar, several lie on ``<name>_number``, which
        counts the groups of the survey in their order. Where rays bend with the ground, some corners of
        each datum's ray through the answer: ``ray_distance(ray_node)``, ``ray_elevation(ray_node)`` and
        ``ray_node_count(ray)``, in the order of the fit table. Of the outer steps that led to the
        linearisation which all this is about, ``outer_chi_square(outer_step)``, first at the prior mean, and
        ``outer_target(outer_step)``, NaN there; and over all their inner iterations, one after another,
        ``inner_chi_square(inner_iteration)``, of the linearisation of ``inner_step(inner_iteration)``.
    """
    history, choices = result.history, result.choices
    inside = ground(result.axes, surface)
    rules = np.array([choice.rule for choice in choices], dtype=object)
    axes = coordinates(result.axes)
    axes["iteration"] = _coordinate("iteration", np.arange(history.last + 1, dtype=np.int32))
    axes["rule"] = _coordinate("rule", rules)
    # As characters, CF's way with labels: checkers take a coordinate of whole strings for numbers.
    axes["rule"].encoding["dtype"] = "S1"

    variables = {
        curve: _numbers("iteration", values, long_name)
        for curve, long_name in CURVES.items()
        if (values := getattr(history, curve)) is not None
    }
    if (gcv := history.gcv(options.gcv_factor)) is not None:
        long_name = f"generalised cross-validation, degrees of freedom counted {options.gcv_factor:g} times"
        variables["gcv"] = _numbers("iteration", np.where(np.isfinite(gcv), gcv, np.nan), long_name)
    for grouping, distances in history.whiteness.items():
        long_name = (
            f"distance from white noise, within each {grouping}; white stays under 1.36 in 95 % of cases"
        )
        variables[f"whiteness_{grouping}"] = _numbers("iteration", distances, long_name)
    variables |= _picks(choices)
    size = np.array(result.noise)
    variables["noise"] = _numbers((), size, "estimated size of the errors over what is stated")
    target = np.array((options.tau * options.noise) ** 2)
    variables["target_chi_square"] = _numbers((), target, "target of the mean squared whitened residual")
    for label, found in result.extras.items():
        variables[label] = _extra(label, found.values, found.units)
    variables |= ray_variables(result.rays)
    if result.outer_steps is not None:
        variables |= _outer_steps(result.outer_steps)
    seen = result.property
    pictures = [
        Field(f"{seen.name}_at_pick", choice.model, seen.units, f"{seen.long_name} at the pick of the rule")
        for choice in choices
    ]
    variables[pictures[0].name] = _stack("rule", pictures, inside)
    if result.snapshots:
        kept, models = zip(*result.snapshots, strict=True)
        axes["kept_iteration"] = _coordinate("kept_iteration", np.array(kept, dtype=np.int32))
        pictures = [
            Field(f"{seen.name}_at_iteration", model, seen.units, f"{seen.long_name} at a kept iteration")
            for model in models
        ]
        variables[pictures[0].name] = _stack("kept_iteration", pictures, inside)

    summary = (
        f"Iteration of profile {name} on the finest rung, and where each stopping rule would stop; "
        f"{result.chosen.rule} is the one chosen."
    )
    return xr.Dataset(variables, axes, provenance.attributes(summary) | argument(result))


def write_history(folder: Path, name: str, dataset: xr.Dataset) -> Path:
    """Write ``<name>_history.nc`` into ``folder``; `OutputError` when the place cannot be written."""
    path = folder / f"{name}_history.nc"
    write_netcdf(dataset, path)
    return path


def _outer_steps(steps: OuterSteps) -> dict[str, xr.Variable]:
    inner = np.concatenate([np.empty(0), *steps.inner])
    number = np.repeat(np.arange(len(steps.inner)) + 1, [len(curve) for curve in steps.inner])
    return {
        "outer_chi_square": _numbers(
            "outer_step", np.array(steps.misfits), "mean squared whitened residual, recomputed"
        ),
        "outer_target": _numbers(
            "outer_step", np.array([np.nan, *steps.targets]), "what the linearised misfit was to fall to"
        ),
        "inner_chi_square": _numbers("inner_iteration", inner, "mean squared whitened residual, linearised"),
        "inner_step": xr.Variable(
            "inner_iteration", number.astype(np.int32), {"long_name": "outer step it led to", "units": "1"}
        ),
    }


def _picks(choices: tuple[Choice, ...]) -> dict[str, xr.Variable]:
    picked = [np.nan if choice.pick.iteration is None else choice.pick.iteration for choice in choices]
    numbers = {
        "picked_iteration": (picked, "iteration that the rule picks"),
        "shown_iteration": ([c.iteration for c in choices], "iteration where the picture is taken"),
        "shown_chi_square": ([c.chi_square for c in choices], "mean squared whitened residual there"),
        "shown_roughness": ([c.roughness for c in choices], "norm of the solution there"),
        "shown_distance": (
            [np.nan if c.distance is None else c.distance for c in choices],
            "relative L2 distance from the chosen rule's picture",
        ),
    }
    variables = {
        name: _numbers("rule", np.array(values), long_name) for name, (values, long_name) in numbers.items()
    }
    variables["firm"] = xr.Variable(
        "rule",
        np.array([choice.pick.firm for choice in choices], dtype=np.int8),
        {
            "standard_name": "status_flag",
            "long_name": "whether the pick is firm",
            "flag_values": np.array([0, 1], dtype=np.int8),
            "flag_meanings": "weak firm",
        },
        {"_FillValue": np.int8(127)},
    )
    reasons = np.array([choice.pick.reason for choice in choices], dtype=object)
    variables["reason"] = xr.Variable("rule", reasons, {"long_name": "why the rule picks it"})
    return variables


def _stack(dim: str, pictures: list[Field], inside: NDArray[np.bool_]) -> xr.Variable:
    layers = [map_variable(picture, inside, {"coverage_content_type": "modelResult"}) for picture in pictures]
    values = np.stack([layer.to_numpy() for layer in layers])
    return xr.Variable((dim, *layers[0].dims), values, layers[0].attrs)


def _extra(name: str, values: Array, units: str) -> xr.Variable:
    said = {
        "long_name": f"{name.replace('_', ' ')} at the chosen pick",
        "units": units,
        "coverage_content_type": "modelResult",
    }
    if values.size == 1:
        return xr.Variable((), np.float32(values.item()), said)
    return xr.Variable(f"{name}_number", values.astype(np.float32), said)


def _numbers(dims: str | tuple[()], values: Array, long_name: str) -> xr.Variable:
    return xr.Variable(dims, values.astype(np.float32), {"long_name": long_name, "units": "1"})


def _coordinate(name: str, values: NDArray[np.int32] | NDArray[np.object_]) -> xr.Variable:
    return xr.Variable(name, values, COORDINATES[name])
