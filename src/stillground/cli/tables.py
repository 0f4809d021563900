"""The tables that the commands print."""

from __future__ import annotations

import math
from collections.abc import Sequence
from pathlib import Path
from typing import Any

import numpy as np
from rich.table import Table

from stillground import plugins as registry
from stillground.cli.console import out, say
from stillground.counted import counted
from stillground.percent import percent
from stillground.pipeline.inspect import Plan
from stillground.pipeline.rehearse import Patterns, Rehearsed
from stillground.pipeline.run import Begun, Done, Outcome
from stillground.products.averages import read_averages
from stillground.products.overlay import overlay_sentence
from stillground.products.provenance import CAUTION
from stillground.products.reading import shown
from stillground.products.reliability import MESH_DEPENDENT, NO_DATA
from stillground.products.start_dependence import start_sentence
from stillground.products.units import with_unit
from stillground.protocols import Choice, Ladder, Rehearsal, Result, Sensitivity
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


def begun(begun: Begun) -> None:
    """What one profile is taken for, and what is odd about it and its settings, before any work."""
    say()
    remarks(begun.profile.report)
    for fact in begun.profile.scene.facts:
        say(fact)
    for sentence in (*begun.profile.scene.doubts, *begun.advice):
        say(f"warning: {sentence}")


def profile(done: Done) -> None:
    """One profile's rules, ladder and verdict."""
    result = done.result.arrays
    nodes = " by ".join(str(len(axis)) for axis in result.axes)
    say(f"{done.result.name}: {result.observed.size} data, {nodes} nodes, background {_background(result)}")
    say()
    _rules(result.choices, result.chosen)
    if (steps := result.outer_steps) is not None:
        fallen = ", ".join(_number(misfit) for misfit in steps.misfits)
        say(f"misfit over {counted(len(steps.targets), 'outer step', 'outer steps')}: {fallen}")
        if len(steps.homing) > 1:
            home = ", ".join(_number(misfit) for misfit in steps.homing)
            made = counted(len(steps.homing) - 1, "step", "steps")
            say(f"the answer's own misfit, over {made} to it: {home}")
    if result.chosen.chi_square_recomputed is not None:
        say(
            f"misfits are those of the last linearisation; the answer's own is "
            f"{_number(result.chosen.chi_square_recomputed)}"
        )
    if result.start_dependence:
        say(start_sentence(result.start_dependence))
    if result.rehearsal is not None:
        _rehearsal(result.rehearsal, result.chosen.rule)
        say()
    if result.sensitivity is not None:
        _sensitivity(result.sensitivity)
    for name, found in result.extras.items():
        values, units = found.values, found.units
        if values.size > 1:
            largest = with_unit(f"{np.abs(values).max():.3g}", units)
            say(f"{name}: rms {np.sqrt(np.mean(values**2)):.3g}, largest {largest}")
        elif found.deviation is None:
            say(f"{name}: {with_unit(f'{values[0]:.3g}', units)}")
        else:
            told = with_unit(f"{values[0]:.3g} +- {found.deviation:.2g}", units)
            say(f"{name}: {told} (one standard deviation)")
    averages = read_averages(result)
    for mean in averages:
        say(mean.sentence)
    if averages:
        say()
    if done.result.overlay is not None:
        say(overlay_sentence(done.result.overlay.summary()))
        say()
    _ladder(result.ladder)
    for sentence in result.remarks:
        say(f"warning: {sentence}")
    word, reason = result.ladder.verdict.word, result.ladder.verdict.reason
    colour = {"settled": "green", "drifting": "red", "undecided": "yellow"}[word]
    out().print(f"[bold {colour}]{word.upper()}[/]  ", end="")
    say(f"{reason}.")
    flags = done.result.picture["reliability"].values
    known = flags != NO_DATA
    dependent = np.sum(flags == MESH_DEPENDENT) / max(np.sum(known), 1)
    if dependent:
        say(f"{percent(dependent)} of the ground still depends on the grid by itself; see the hatching.")


def _background(result: Result) -> str:
    values, _, units = shown(result.property, result.background)
    least, most = f"{values.min():.4g}", f"{values.max():.4g}"
    return with_unit(least if least == most else f"{least} to {most}", units)


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
    verdict, index = ladder.verdict, ladder.index
    order = f"order {_number(verdict.order)}"
    if verdict.expected is not None:
        order += f" (expected {verdict.expected:.2g})" if verdict.expected else " (no limit expected)"
    facts = [
        order,
        "still to come " + ("-" if verdict.remaining is None else percent(verdict.remaining)),
        "drift of the stop " + ("-" if ladder.pick_drift is None else percent(ladder.pick_drift)),
    ]
    say(", ".join(facts))
    say(
        f"cross-check: no grid convergence index of the rms anomaly ({index.reason})"
        if index.index is None
        else f"cross-check: grid convergence index of the rms anomaly {percent(index.index)}, "
        f"its order {_number(index.order)}"
    )
    for sentence in ladder.notes:
        say(f"note: {sentence}")


def rehearsal(found: Rehearsed) -> None:
    """One profile's rehearsal."""
    say()
    say(f"{found.name}: error over the best iterate's, on synthetic ground under this survey")
    say()
    _rehearsal(found.rehearsal, found.choose)
    for sentence in found.rehearsal.remarks:
        say(f"warning: {sentence}")
    say(f"written: {found.file}, {found.figure}")


def _rehearsal(found: Rehearsal, choose: str) -> None:
    table = _table("rule", "ground", ">median", ">90 %", ">worst", ">cost", ">group")
    for group, rules in enumerate(found.groups, start=1):
        for rule in rules:
            families = [(name, each[rule]) for name, each in found.ratios.items()]
            for number, (name, ratios) in enumerate(families):
                table.add_row(
                    "" if number else (f"{rule} (chosen)" if rule == choose else rule),
                    name,
                    *(
                        f"{value:.2f}"
                        for value in (np.median(ratios), np.quantile(ratios, 0.9), ratios.max())
                    ),
                    "" if number else f"{100 * found.cost[rule]:z.0f} %",
                    "" if number else str(group),
                )
    _show(table)
    for rule, why in found.left_out.items():
        say(f"{rule} {why}: not ranked")
    best = found.groups[0]
    named = ", ".join(best)
    if choose in best:
        cost = 100 * found.cost[choose]
        say(
            f'stopping.choose = "{choose}" is among the best here ({named}); trusting it costs {cost:z.0f} %.'
        )
    elif choose in found.cost:
        least, cost = 100 * found.cost[best[0]], 100 * found.cost[choose]
        say(
            f'set stopping.choose = "{best[0]}" (best here: {named}): it costs {least:z.0f} % on its worst '
            f'family, "{choose}" {cost:z.0f} %.'
        )
    else:
        say(f'stopping.choose = "{choose}" does not apply to all of these grounds; best here: {named}.')


def pattern(found: Patterns) -> None:
    """What came back of one profile's patterns."""
    say()
    say(f"{found.name}: patterns through the survey, at iteration {found.stop:.3g}")
    say()
    table = _table("pattern", ">size", ">comes back (median)", ">ground where half does")
    for each in found.patterns:
        table.add_row(
            each.name,
            f"{each.size:g} m",
            f"{100 * float(np.median(each.share)):z.0f} %",
            f"{100 * float(np.mean(each.share >= 0.5)):.0f} %",
        )
    _show(table)
    say(f"written: {found.file}, {found.figure}")


def _sensitivity(found: Sensitivity) -> None:
    table = _table("changed", ">stop", ">picture moves")
    for variation in found.variations:
        table.add_row(variation.name, _number(variation.iteration), f"{100 * variation.distance:z.0f} %")
    _show(table)


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
        lines.append(f"{report.switched_off} of {counted(report.rows, 'row', 'rows')} switched off by 'use'")
    if report.repeated:
        rows = "; ".join(", ".join(map(str, group)) for group in report.repeated[:_LISTED])
        repeated = counted(len(report.repeated), "measurement", "measurements")
        lines.append(f"{repeated} repeated (rows {_shorten(rows, report.repeated)})")
    if report.suspicious:
        rows = ", ".join(f"{row} ({1 / value:.4g} m s-1)" for row, value in report.suspicious[:_LISTED])
        lines.append(
            f"{counted(len(report.suspicious), 'row', 'rows')} with an apparent velocity far from the "
            f"others: {_shorten(rows, report.suspicious)}; look at these picks"
        )
    if report.ignored_columns:
        lines.append(f"columns not used: {', '.join(report.ignored_columns)}")
    for line in lines:
        say(f"note: {line}")


def _shorten(text: str, listed: tuple[Any, ...]) -> str:
    return text if len(listed) <= _LISTED else f"{text} and {len(listed) - _LISTED} more"


def plan(planned: Plan, figures: Sequence[Path]) -> None:
    """One profile of `inspect`."""
    survey, report = planned.profile.survey, planned.profile.report
    say()
    say(f"{planned.profile.name}: {survey.sizes['datum']} data of {report.rows} rows in {report.source}")
    positions = planned.profile.scene.positions.items()
    counts = ", ".join(f"{len(places)} {what}{'s' * (len(places) > 1)}" for what, places in positions)
    say("; ".join(filter(None, [counts, f"errors {report.errors}"])))
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
    times = ", ".join(f"{_time(seconds)} for the {what}" for what, seconds in planned.seconds.items())
    total = _time(sum(planned.seconds.values()))
    say(
        f"a run will take about {total}, give or take a factor of two ({times}), "
        f"and {planned.memory / 2**20:.0f} MiB"
    )
    for figure in figures:
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
