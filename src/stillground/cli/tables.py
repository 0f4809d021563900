"""The tables that the commands print."""

from __future__ import annotations

import math
from pathlib import Path
from typing import Any

import numpy as np
from rich.table import Table

from stillground import plugins as registry
from stillground.cli.console import out, say
from stillground.pipeline.inspect import Plan
from stillground.pipeline.run import Done, Outcome
from stillground.products.provenance import CAUTION
from stillground.products.reliability import MESH_DEPENDENT, NO_DATA
from stillground.protocols import Choice, Ladder, Result
from stillground.survey import SurveyReport, to_si

_LISTED = 8


def _table(*columns: str) -> Table:
    """Our one look: no lines, numbers to the right (columns that start with '>')."""
    table = Table(box=None, pad_edge=False, padding=(0, 2, 0, 0), header_style="bold", show_edge=False)
    for column in columns:
        table.add_column(column.lstrip(">"), justify="right" if column.startswith(">") else "left",
                         overflow="fold", no_wrap=column.startswith(">"))  # fmt: skip
    return table


def _show(table: Table) -> None:
    out().print(table)
    say()


def _number(value: float | None, digits: int = 3) -> str:
    return "-" if value is None or math.isnan(value) else f"{value:.{digits}g}"


def profile(done: Done) -> None:
    """One profile's rules, ladder and verdict."""
    result = done.result.arrays
    say()
    remarks(done.result.profile.report)
    for sentence in (*done.result.profile.scene.doubts, *done.result.advice):
        say(f"warning: {sentence}")
    nodes = " by ".join(str(len(axis)) for axis in result.axes)
    say(f"{done.result.name}: {result.observed.size} data, {nodes} nodes, background {_background(result)}")
    say()
    _rules(result.choices, result.chosen)
    _ladder(result.ladder)
    word, reason = result.ladder.verdict.word, result.ladder.verdict.reason
    colour = {"settled": "green", "drifting": "red", "undecided": "yellow"}[word]
    out().print(f"[bold {colour}]{word.upper()}[/]  ", end="")
    say(f"{reason}.")
    flags = done.result.section["reliability"].values
    known = flags != NO_DATA
    dependent = np.sum(flags == MESH_DEPENDENT) / max(np.sum(known), 1)
    if dependent:
        say(f"{100 * dependent:.2g} % of the ground still depends on the grid by itself; see the hatching.")


def _background(result: Result) -> str:
    value, units = float(result.background.flat[0]), result.property.units
    if result.property.reciprocal is not None:
        value, units = 1 / value, result.property.reciprocal[1]
    return f"{value:.4g} {units}"


def _rules(choices: tuple[Choice, ...], chosen: Choice) -> None:
    table = _table("rule", ">iteration", ">misfit", ">roughness", ">distance", "standing", "why")
    for choice in choices:
        table.add_row(
            f"{choice.rule} (chosen)" if choice is chosen else choice.rule,
            _number(choice.pick.iteration),
            _number(choice.chi_square),
            _number(choice.roughness),
            "-" if choice.distance is None else f"{100 * choice.distance:.1f} %",
            "firm" if choice.pick.firm else "weak",
            choice.pick.reason,
        )
    _show(table)


def _ladder(ladder: Ladder) -> None:
    table = _table(">spacing", ">nodes", ">own stop", ">change")
    for number, rung in enumerate(ladder.rungs):
        table.add_row(
            " by ".join(f"{h:g}" for h in dict.fromkeys(rung.spacing)) + " m",
            f"{rung.n_nodes:,}",
            _number(rung.iteration),
            f"{100 * ladder.change[number - 1]:.3g} %" if number else "",
        )
    _show(table)
    verdict = ladder.verdict
    facts = [
        f"order {_number(verdict.order)}",
        "still to come " + ("-" if verdict.remaining is None else f"{100 * verdict.remaining:.2g} %"),
        "drift of the stop " + ("-" if ladder.pick_drift is None else f"{100 * ladder.pick_drift:.2g} %"),
    ]
    say(", ".join(facts))


def closing(outcome: Outcome) -> None:
    """What was written, how long it took, and the cautions."""
    say()
    seconds = outcome.summary["seconds"]
    took = "" if seconds is None else f" in {seconds:.1f} s"
    say(f"verdict of the run: {outcome.summary['verdict']}{took}; products in {outcome.folder}")
    say(CAUTION)


def remarks(report: SurveyReport) -> None:
    """What the check found worth knowing, a line each."""
    lines = []
    if report.switched_off:
        lines.append(f"{report.switched_off} of {report.rows} rows switched off by 'use'")
    if report.repeated:
        rows = "; ".join(", ".join(map(str, group)) for group in report.repeated[:_LISTED])
        lines.append(f"{len(report.repeated)} measurements repeated (rows {_shorten(rows, report.repeated)})")
    if report.suspicious:
        rows = ", ".join(f"{row} ({1 / value:.4g} m s-1)" for row, value in report.suspicious[:_LISTED])
        lines.append(
            f"{len(report.suspicious)} rows with an apparent velocity far from the others: "
            f"{_shorten(rows, report.suspicious)}; look at these picks"
        )
    if report.ignored_columns:
        lines.append(f"columns not used: {', '.join(report.ignored_columns)}")
    for line in lines:
        say(f"note: {line}")


def _shorten(text: str, listed: tuple[Any, ...]) -> str:
    return text if len(listed) <= _LISTED else f"{text} and {len(listed) - _LISTED} more"


def plan(planned: Plan, figure: Path) -> None:
    """One profile of `inspect`."""
    survey, report = planned.profile.survey, planned.profile.report
    say()
    say(f"{planned.profile.name}: {survey.sizes['datum']} data of {report.rows} rows in {report.source}")
    counts = ", ".join(f"{len(places)} {what}s" for what, places in planned.profile.scene.positions.items())
    say(f"{counts}; errors {report.errors}")
    for fact in planned.profile.scene.facts:
        say(fact)
    say()
    ranges = _table("column", ">smallest", ">largest", "unit")
    for name, (low, high) in report.ranges.items():
        si = str(survey[name].attrs.get("units", ""))
        unit = str(survey[name].attrs.get("original_units", si))
        factor = to_si(1.0, unit, si) if unit != si else 1.0
        ranges.add_row(name, f"{low / factor:.9g}", f"{high / factor:.9g}", unit)
    _show(ranges)
    remarks(report)
    rungs = _table(">rung", ">spacing", ">nodes")
    for number, grid in enumerate(planned.grids, start=1):
        shape = " by ".join(f"{n}" for n in grid.shape)
        rungs.add_row(str(number), " by ".join(f"{h:g}" for h in dict.fromkeys(grid.spacing)) + " m", shape)
    _show(rungs)
    for sentence in (*planned.profile.scene.doubts, *planned.advice):
        say(f"warning: {sentence}")
    say(
        f"a run will take about {_time(planned.seconds)} without figures and {planned.memory / 2**20:.0f} MiB"
    )
    say(f"figure: {figure}")


def _time(seconds: float) -> str:
    if seconds < 10:
        return f"{seconds:.1g} s"
    return f"{seconds:.0f} s" if seconds < 60 else f"{seconds / 60:.1f} min"


def plugins() -> None:
    """All that is registered."""
    table = _table("what", "name", "from", "where")
    for what, group in (("kind", "physics"), ("solver", "solvers"), ("rule", "rules")):
        for plugin in registry.registered(group):  # type: ignore[arg-type]
            table.add_row(what, plugin.name, plugin.distribution, plugin.target)
    _show(table)
