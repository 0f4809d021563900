"""``summary.json``: what a run found, in numbers that programs read."""

from __future__ import annotations

import json
import math
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

from stillground.products.ladder import rung_spacing
from stillground.protocols import Result
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
            "change": list(ladder.change),
            "remaining": ladder.verdict.remaining,
            "pick_drift": ladder.pick_drift,
            "levels": [
                {
                    "spacing": rung_spacing(rung),
                    "nodes": rung.n_nodes,
                    "iteration": _count(rung.iteration),
                }
                for rung in ladder.rungs
            ],
        },
        "files": dict(files),
    }


def run_summary(
    title: str, version: str, seconds: float | None, profiles: Sequence[Mapping[str, Any]]
) -> dict[str, Any]:
    """The whole run; its verdict is the worst profile's.

    Parameters
    ----------
    title, version : str
    seconds : float or None
        What the run took; None where the file must come out the same each time.
    profiles : sequence of mapping
        From `profile_summary`, at least one.
    """
    words = {profile["refinement"]["verdict"] for profile in profiles}
    return {
        "schema": 1,
        "title": title,
        "version": version,
        "verdict": min(words, key=WORST_FIRST.index),
        "seconds": seconds,
        "profiles": list(profiles),
    }


def write_summary(folder: Path, summary: Mapping[str, Any]) -> Path:
    """Write ``summary.json`` into ``folder``: six significant digits, null for what is no number.

    Raises
    ------
    OutputError
        When the place cannot be written.
    """
    path = folder / SUMMARY
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
