"""``summary.json``: what a run found, in numbers that programs read."""

from __future__ import annotations

import json
import math
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

import numpy as np

from stillground.products.averages import read_averages
from stillground.products.ladder import rung_spacing
from stillground.products.ratios import ratio_numbers
from stillground.protocols import Found, OuterSteps, Rehearsal, Result, Sensitivity
from stillground.whole import whole

WORST_FIRST = ("drifting", "undecided", "settled")

SUMMARY = "summary.json"


def profile_summary(name: str, result: Result, files: Mapping[str, str]) -> dict[str, Any]:
    """One profile's entry.

    Parameters
    ----------
    name : str
    result : Result
    files : mapping
        Product name to file name, relative to the output folder.

    Returns
    -------
    dict
        Of extra unknowns a lone one is told with its ``values`` and posterior ``deviation``, many by their
        ``rms`` and ``largest`` size. ``index`` is the grid convergence index of the rms anomaly, None for
        ``index_reason``. ``averages`` are of what people read, as velocity. Of a nonlinear measurement
        ``chi_square_recomputed`` is the chosen answer's own misfit, beside that on its last linearisation
        (else None), ``outer_steps`` the misfits, targets and numbers of inner iterations that led there (else
        None), and ``start_dependence`` how far other starts move the answer on a coarse rung, relative.
        ``rehearsal`` and ``sensitivity`` are None where they were not asked for.
    """
    ladder, chosen = result.ladder, result.chosen
    return {
        "name": name,
        "data": result.observed.size,
        "nodes": result.model.size,
        "chosen": {
            "rule": chosen.rule,
            "iteration": _count(chosen.iteration),
            "chi_square": chosen.chi_square,
            "chi_square_recomputed": chosen.chi_square_recomputed,
        },
        "rules": [
            {
                "rule": choice.rule,
                "iteration": _count(choice.pick.iteration),
                "chi_square": choice.chi_square,
                "firm": choice.pick.firm,
                "roughness": choice.roughness,
                "distance": choice.distance,
                "reason": choice.pick.reason,
            }
            for choice in result.choices
        ],
        "refinement": {
            "verdict": ladder.verdict.word,
            "reason": ladder.verdict.reason,
            "order": ladder.verdict.order,
            "expected": ladder.verdict.expected,
            "change": list(ladder.change),
            "remaining": ladder.verdict.remaining,
            "pick_drift": ladder.pick_drift,
            "jitter": ladder.jitter,
            "index": ladder.index.index,
            "index_order": ladder.index.order,
            "index_reason": ladder.index.reason,
            "notes": list(ladder.notes),
            "levels": [
                {
                    "spacing": rung_spacing(rung),
                    "nodes": rung.n_nodes,
                    "iteration": _count(rung.iteration),
                }
                for rung in ladder.rungs
            ],
        },
        "averages": [
            {
                "name": mean.over,
                "property": mean.of,
                "units": mean.units,
                "value": mean.value,
                "noise_part": mean.noise_part,
                "total_error": mean.total_error,
            }
            for mean in read_averages(result)
        ],
        "noise": result.noise,
        "outer_steps": None if result.outer_steps is None else _outer_steps(result.outer_steps),
        "start_dependence": dict(result.start_dependence),
        "remarks": list(result.remarks),
        "extras": {name: _extra(extra) for name, extra in result.extras.items()},
        "rehearsal": None if result.rehearsal is None else rehearsal_summary(result.rehearsal),
        "sensitivity": None if result.sensitivity is None else _variations(result.sensitivity),
        "files": dict(files),
    }


def rehearsal_summary(rehearsal: Rehearsal) -> dict[str, Any]:
    """Groups of equals, costs of trusting rules, what is left out, ratios by family in three numbers."""
    return {
        "groups": [list(group) for group in rehearsal.groups],
        "cost": dict(rehearsal.cost),
        "left_out": dict(rehearsal.left_out),
        "remarks": list(rehearsal.remarks),
        "families": {
            family: {rule: ratio_numbers(ratios) for rule, ratios in rules.items()}
            for family, rules in rehearsal.ratios.items()
        },
    }


def _outer_steps(steps: OuterSteps) -> dict[str, Any]:
    return {
        "misfits": list(steps.misfits),
        "targets": list(steps.targets),
        "inner_iterations": [len(curve) - 1 for curve in steps.inner],
        "homing": list(steps.homing),
    }


def _variations(sensitivity: Sensitivity) -> list[dict[str, Any]]:
    return [
        {"name": varied.name, "iteration": _count(varied.iteration), "distance": varied.distance}
        for varied in sensitivity.variations
    ]


def _extra(found: Found) -> dict[str, Any]:
    values = found.values
    if values.size == 1:
        return {"units": found.units, "values": values.tolist(), "deviation": found.deviation}
    rms, largest = float(np.sqrt(np.mean(values**2))), float(np.abs(values).max())
    return {"units": found.units, "rms": rms, "largest": largest}


def run_summary(
    title: str,
    version: str,
    seconds: float | None,
    profiles: Sequence[Mapping[str, Any]],
    files: Mapping[str, str] | None = None,
) -> dict[str, Any]:
    """The whole run; its verdict is the worst profile's.

    Parameters
    ----------
    title, version : str
    seconds : float or None
        What the run took; None where the file must come out the same each time.
    profiles : sequence of mapping
        From `profile_summary`, at least one.
    files : mapping, optional
        Product to file name, of those that hold the whole run.
    """
    words = {profile["refinement"]["verdict"] for profile in profiles}
    return {
        "schema": 1,
        "title": title,
        "version": version,
        "verdict": min(words, key=WORST_FIRST.index),
        "seconds": seconds,
        "profiles": list(profiles),
        "files": dict(files or {}),
    }


def write_summary(folder: Path, summary: Mapping[str, Any]) -> Path:
    """Write ``summary.json`` into ``folder``: six significant digits, null for what is no number.

    Raises
    ------
    OutputError
        When the place cannot be written.
    """
    return _write(folder / SUMMARY, summary)


def write_rehearsal(folder: Path, name: str, rehearsal: Rehearsal, chosen: str) -> Path:
    """Write ``<name>_rehearsal.json`` into ``folder``, in the numbers of ``summary.json``.

    ``name`` is the profile's and ``chosen`` the rule that the configuration chooses; the rest is as in
    `rehearsal_summary`.

    Raises
    ------
    OutputError
        When the place cannot be written.
    """
    told = {"schema": 1, "name": name, "chosen": chosen, **rehearsal_summary(rehearsal)}
    return _write(folder / f"{name}_rehearsal.json", told)


def _write(path: Path, summary: Mapping[str, Any]) -> Path:
    text = json.dumps(_plain(summary), indent=1, ensure_ascii=False, allow_nan=False)
    with whole(path) as temporary:
        temporary.write_text(text + "\n", encoding="utf-8", newline="\n")
    return path


def _plain(value: Any) -> Any:
    if isinstance(value, Mapping):
        return {key: _plain(inner) for key, inner in value.items()}
    if isinstance(value, list):
        return [_plain(inner) for inner in value]
    if isinstance(value, float):
        return float(f"{value:.6g}") if math.isfinite(value) else None
    return value


def _count(iteration: float | None) -> float | None:
    """A whole iteration without a decimal point."""
    if iteration is None or math.isnan(iteration):
        return None
    return int(iteration) if float(iteration).is_integer() else float(iteration)
