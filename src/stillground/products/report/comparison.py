"""Two results of one line side by side, on a common grid, with their difference."""

from __future__ import annotations

import difflib
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np
from scipy.interpolate import RegularGridInterpolator

from stillground.errors import ResultError
from stillground.percent import percent
from stillground.products.provenance import CAUTION
from stillground.products.reliability import RELIABLE
from stillground.products.report.encoding import pack
from stillground.products.report.folder import Profile, Results, read_results
from stillground.products.report.ground import CHANGE, Frame, Ground, ground_of
from stillground.products.report.page import frame_data, numbers, rendered, write_page
from stillground.products.report.picture import Sight, large
from stillground.products.units import labelled, with_unit
from stillground.protocols import Array

# Traces of one line may lie apart by this share of its length.
_APART = 0.05
_NAMES = ("A", "B")


@dataclass(frozen=True)
class Common:
    """Two answers on one grid, the second less the first, and what is reliable in both."""

    first: Ground
    second: Array
    difference: Array


def write_comparison(first: Path, second: Path, out: Path) -> Path:
    """Makes ``report.html`` in ``out`` that compares two result folders by profiles of equal name.

    Raises
    ------
    ResultError
        When a product is missing or damaged, no profile has the same name in both, or two of a name
        cannot be laid over each other.
    OutputError
        When the place cannot be written.
    """
    return write_page(out, comparison_page(read_results(first), read_results(second)))


def comparison_page(first: Results, second: Results) -> str:
    """The page of two results as text."""
    others = {profile.entry.name: profile for profile in second.profiles}
    pairs = [
        (profile, others[profile.entry.name]) for profile in first.profiles if profile.entry.name in others
    ]
    if not pairs:
        raise ResultError(
            f"{first.folder} holds {_listed(first)} and {second.folder} holds {_listed(second)}: "
            f"no profile has the same name in both"
        )
    return rendered(
        "comparison.html",
        results=(first, second),
        names=_NAMES,
        caution=CAUTION,
        left_out=sorted(
            {profile.entry.name for results in (first, second) for profile in results.profiles}
            - {profile.entry.name for profile, _ in pairs}
        ),
        profiles=[_pair(one, other, i) for i, (one, other) in enumerate(pairs)],
    )


def common(first: Profile, second: Profile) -> Common:
    """Both answers on the finer of their spacings over the ground that both have.

    Raises
    ------
    ResultError
        When they are of other properties or dimensions, on other lines, or have no ground in common.
    """
    one, other = ground_of(first), ground_of(second)
    name = first.entry.name
    if (one.long_name, one.units, first.dims) != (other.long_name, other.units, second.dims):
        raise ResultError(
            f"profile '{name}' is of {labelled(one.long_name, one.units)} on {', '.join(first.dims)} "
            f"in one result and of {labelled(other.long_name, other.units)} on {', '.join(second.dims)} "
            f"in the other: they do not compare"
        )
    axes = [(one.frame.elevation[::-1], other.frame.elevation[::-1])]
    if one.frame.distance is not None:
        axes.append((one.frame.distance, _along(first, second)))
    grid = [_axis(name, way, *pair) for way, pair in zip(("elevation", "distance"), axes, strict=False)]
    nodes = np.stack(np.meshgrid(grid[0][::-1], *grid[1:], indexing="ij"), axis=-1)

    def on_grid(ground: Ground, number: int, values: Array, method: str = "linear") -> Array:
        held = [pair[number] for pair in axes]
        field = values[::-1] if len(held) == 2 else values[::-1, 0]
        for axis, nodes_of in enumerate(held):
            if nodes_of[0] > nodes_of[-1]:
                held[axis], field = nodes_of[::-1], np.flip(field, axis)
        clipped = np.stack([np.clip(nodes[..., i], h[0], h[-1]) for i, h in enumerate(held)], axis=-1)
        found = RegularGridInterpolator(tuple(held), field, method=method)(clipped)
        return np.asarray(found).reshape(nodes.shape[0], -1)

    models = on_grid(one, 0, one.model), on_grid(other, 1, other.model)
    flags = np.maximum(
        on_grid(one, 0, one.flags.astype(float), "nearest"),
        on_grid(other, 1, other.flags.astype(float), "nearest"),
    )
    surfaces = [
        on_grid(ground, i, np.broadcast_to(ground.frame.surface, ground.frame.shape))[0]
        for i, ground in enumerate((one, other))
        if ground.frame.surface is not None
    ]
    surface = np.min(surfaces, axis=0) if surfaces else None
    frame = Frame(grid[1] if len(grid) == 2 else None, grid[0][::-1], surface)
    inside = np.ones(frame.shape, bool) if surface is None else frame.elevation[:, None] <= surface + 1e-9
    if not inside.any():
        raise ResultError(f"profile '{name}': no ground is common to both results")
    ground = replace(
        one, frame=frame, model=models[0], flags=flags.astype(np.int8), inside=inside, companions=()
    )
    return Common(ground, models[1], models[1] - models[0])


def _along(first: Profile, second: Profile) -> Array:
    """Distances of the second's nodes along the first's trace, m."""
    name = first.entry.name
    one, other = (
        np.column_stack([profile.section[axis].values for axis in ("easting", "northing")])
        for profile in (first, second)
    )
    distance = first.section["distance"].values
    step = (one[-1] - one[0]) / (distance[-1] - distance[0])
    metres = float(np.linalg.norm(step))
    relative, direction = (other - one[0]) / metres, step / metres
    aside = np.abs(relative @ np.array([-direction[1], direction[0]]))
    if aside.max() > _APART * np.ptp(distance):
        raise ResultError(
            f"profile '{name}': the traces of the two results lie up to {aside.max():.3g} m apart: "
            f"this is not one line"
        )
    return np.asarray(distance[0] + relative @ direction)


def _axis(name: str, way: str, one: Array, other: Array) -> Array:
    low, high = max(one.min(), other.min()), min(one.max(), other.max())
    if not low < high:
        raise ResultError(
            f"profile '{name}': the grids do not overlap: {way} {one.min():.6g} to {one.max():.6g} m "
            f"in one result, {other.min():.6g} to {other.max():.6g} m in the other"
        )
    step = min(np.ptp(one) / (one.size - 1), np.ptp(other) / (other.size - 1))
    return np.linspace(low, high, max(2, round((high - low) / step) + 1))


def _pair(first: Profile, second: Profile, number: int) -> dict[str, Any]:
    both = common(first, second)
    ground, unit = both.first, both.first.units
    reliable = ground.inside & (ground.flags == RELIABLE)
    used, where = reliable, "Over the ground that is reliable in both,"
    if not reliable.any():
        used, where = ground.inside, "No ground is reliable in both; over all that both have"
    change = max(
        float(np.percentile(np.abs(both.difference[used]), 99)), 1e-3 * (ground.scale[1] - ground.scale[0])
    )
    scale = ground.scale
    if ground.frame.distance is None:
        # Curves are drawn whole, both on one axis.
        models = np.stack([ground.model, both.second])[:, ground.inside]
        scale = (float(models.min()), float(models.max()))
        change = max(change, float(np.abs(both.difference[ground.inside]).max()))
    anomaly = float(np.std(ground.model[used]))
    moved = float(np.sqrt(np.mean(both.difference[used] ** 2)))
    label = ground.label
    less = labelled("B less A", unit)
    sights = [
        Sight(model, scale, label, f"{ground.long_name} of {name}")
        for name, model in zip(_NAMES, (ground.model, both.second), strict=True)
    ] + [Sight(both.difference, (-change, change), less, "difference, B less A", CHANGE)]
    stacks = {
        "pair": pack(np.stack([ground.model, both.second, both.difference]), 2),
        "flags": pack(ground.flags[np.newaxis].astype(float), 1),
    }
    entries = (first.entry, second.entry)
    return {
        "id": f"profile-{number}",
        "entries": entries,
        "numbers": [numbers(entry) for entry in entries],
        "ground": ground,
        "static": [large(ground, sight, {}) for sight in sights],
        "said": f"{where} the pictures differ by {with_unit(f'{moved:.3g}', unit)} (rms)"
        + (f", {percent(moved / anomaly)} of the variation of A." if anomaly > 0 else "."),
        "configuration": _changed(first, second),
        "live": {
            "name": first.entry.name,
            "names": list(_NAMES),
            "frame": frame_data(ground),
            "property": {"name": ground.name, "units": unit},
            "scale": list(scale),
            "change": change,
            "stacks": {name: packed.about for name, packed in stacks.items()},
        }
        | ({"column": True} if ground.frame.distance is None else {}),
        "stacks": stacks,
    }


def _changed(first: Profile, second: Profile) -> str:
    """Lines of the configuration that differ, with a little around them."""
    one, other = (
        str(profile.section.attrs.get("configuration", "")).splitlines() for profile in (first, second)
    )
    return "\n".join(difflib.unified_diff(one, other, *_NAMES, n=1, lineterm=""))


def _listed(results: Results) -> str:
    return ", ".join(f"'{profile.entry.name}'" for profile in results.profiles)
