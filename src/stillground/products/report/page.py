"""``report.html``: one page for a run, made from its product files alone, that needs no network."""

from __future__ import annotations

import base64
import hashlib
import math
from collections.abc import Mapping
from dataclasses import dataclass
from functools import cache
from importlib.resources import files
from pathlib import Path
from typing import Any

import numpy as np
from jinja2 import Environment, PackageLoader, StrictUndefined
from markupsafe import Markup

from stillground.percent import percent
from stillground.products.averages import ReadAverage
from stillground.products.figures.positions import is_star
from stillground.products.figures.sheet import VERDICTS
from stillground.products.overlay import overlay_sentence
from stillground.products.provenance import CAUTION
from stillground.products.rays import drawn_rays, rays_of
from stillground.products.reliability import MEANINGS, MESH_DEPENDENT, POORLY_COVERED, RELIABLE
from stillground.products.report.curves import curve_charts, curve_table
from stillground.products.report.drawing import badge_symbol, minus
from stillground.products.report.encoding import Packed, pack
from stillground.products.report.folder import Entry, Profile, Results, RuleEntry, read_results
from stillground.products.report.ground import CHANGE, FIELD, Companion, Ground, colours, ground_of
from stillground.products.report.history import Pictures, pictures
from stillground.products.report.misfits import Shown as FigureShown
from stillground.products.report.misfits import extra_charts, fit_charts, legible, outliers, places
from stillground.products.report.picture import Sight, colour_bar, column_ends, large, small
from stillground.products.report.rungs import change_chart, rung_pictures
from stillground.products.start_dependence import start_sentence
from stillground.products.units import with_unit
from stillground.protocols import Array
from stillground.whole import whole

REPORT = "report.html"
MOST_BYTES = 8_000_000
# What the page itself takes, and the text of a profile beside charts and pictures.
_PAGE, _TEXT = 60_000, 40_000
_ROOM = (250.0, 210.0)
_COARSE = "The grid has more nodes than a screen shows: here it is thinned, and the files have all of it."
_FAMILIES = {"prior": "from the prior", "layers": "level layers", "described": "the described ground"}


def write_report(folder: Path, out: Path | None = None) -> Path:
    """Makes ``report.html`` from the products in ``folder``.

    Parameters
    ----------
    folder : Path
        With ``summary.json`` and the files that it names.
    out : Path, optional
        Folder to write into; default: ``folder``.

    Raises
    ------
    ResultError
        When a product is missing or damaged.
    OutputError
        When the place cannot be written.
    """
    return write_page(out or folder, report_page(read_results(folder)))


def write_page(folder: Path, page: str) -> Path:
    """Write a page as ``report.html`` into ``folder``; `OutputError` when the place cannot be written."""
    path = folder / REPORT
    with whole(path) as temporary:
        temporary.write_text(page, encoding="utf-8", newline="\n")
    return path


def report_page(results: Results) -> str:
    """The page of a run as text."""
    rules = dict.fromkeys(rule.rule for profile in results.profiles for rule in profile.entry.rules)
    symbols = {rule: f"badge-{number}" for number, rule in enumerate(rules)}
    room = (MOST_BYTES - _PAGE) // len(results.profiles)
    return rendered(
        "report.html",
        summary=results.summary,
        caution=CAUTION,
        symbols=joined_symbols(symbols),
        profiles=[_profile(profile, symbols, room, i) for i, profile in enumerate(results.profiles)],
    )


def rendered(template: str, **said: Any) -> str:
    """A page from a template, with style and script inside and a policy that allows these alone."""
    style, script = _asset("report.css"), _asset("report.js")
    return _environment().get_template(template).render(
        style=Markup(style),
        script=Markup(script),
        policy=f"default-src 'none'; script-src '{_digest(script)}'; style-src '{_digest(style)}'; "
        f"img-src data:; base-uri 'none'; form-action 'none'",
        tables={"field": packed_colours(FIELD), "change": packed_colours(CHANGE)},
        **said,
    )  # fmt: skip


def joined_symbols(symbols: Mapping[str, str]) -> Markup:
    """Badges of the rules as SVG symbols, to be used by their ids."""
    return Markup("").join(badge_symbol(rule, name) for rule, name in symbols.items())


def packed_colours(name: str) -> str:
    """A colour table as base64 of 256 times red, green and blue."""
    return base64.b64encode(colours(name).tobytes()).decode("ascii")


@dataclass(frozen=True)
class RuleRow:
    """A rule as the page lists it."""

    entry: RuleEntry
    symbol: str
    chosen: bool


def _profile(profile: Profile, symbols: Mapping[str, str], room: int, number: int) -> dict[str, Any]:
    entry, ground = profile.entry, ground_of(profile)
    stand = places(profile)
    traced = rays_of(profile.history)
    rays = drawn_rays(traced)
    label = ground.label
    stop = _number(entry.chosen.iteration)
    said = (
        f"{ground.long_name} at the pick of {entry.chosen.rule}, iteration {stop}: from "
        f"{ground.model.min():.4g} to {with_unit(f'{ground.model.max():.4g}', ground.units)}; "
        f"hatched where it is not reliable"
    )
    band = ground.band
    sight = Sight(ground.model, ground.scale, label, said)
    listed, light = outliers(profile)
    drawn = {rule: name for rule, name in symbols.items() if rule in {r.rule for r in entry.rules}}
    told: dict[str, Any] = {
        "id": f"profile-{number}",
        "entry": entry,
        "shape": VERDICTS[entry.refinement.verdict][1],
        "numbers": numbers(entry),
        "shares": _shares(ground),
        "rules": [RuleRow(rule, drawn[rule.rule], rule.rule == entry.chosen.rule) for rule in entry.rules],
        "ground": ground,
        "column": ground.frame.distance is None,
        "tall": ground.frame.tall,
        "static": large(ground, sight, stand, None if band is None else band.values, rays),
        "rays": (len(rays), len(traced)),
        "own_misfit": _own_misfit(entry, traced=bool(rays)),
        "other_starts": _other_starts(entry),
        "picks": _picks(profile, ground, label, drawn),
        "bar": colour_bar(Sight(ground.model, ground.scale, label, said)),
        "curves": curve_charts(profile, drawn),
        "table": curve_table(profile),
        "change": change_chart(profile),
        "rungs": rung_pictures(profile, ground),
        "fit": fit_charts(profile),
        "beside": _beside(entry),
        "extras": _extras(entry),
        "extra_charts": extra_charts(profile),
        "outliers": listed,
        "light": light,
        "groupings": profile.groupings,
        "quality": [_quality(ground, companion) for companion in ground.companions],
        "families": _FAMILIES,
        "cautions": _cautions(profile),
        "provenance": _provenance(profile),
        "beyond": _beyond(ground),
        "places": _signs(list(stand)),
    }
    quality = pack(np.stack([ground.flags.astype(float), *(one.values for one in ground.companions)]), 1)
    frames = pictures(profile, ground, room - _TEXT - len(quality.text) - _size(list(told.values())))
    stacks = {"picks": frames.picked, "quality": quality}
    if frames.between is not None:
        stacks["between"] = frames.between
    return told | {
        "note": " ".join(said for said in (frames.note, _COARSE if ground.halvings else "") if said),
        "live": _live(profile, ground, frames, stacks, stand, drawn),
        "stacks": stacks,
    }


def _size(told: Any) -> int:
    """Length of all charts and pictures in what a template is told."""
    if isinstance(told, Markup):
        return len(told)
    if isinstance(told, FigureShown):
        return len(told.picture)
    return sum(_size(one) for one in told) if isinstance(told, list | tuple) else 0


def _live(
    profile: Profile,
    ground: Ground,
    frames: Pictures,
    stacks: Mapping[str, Packed],
    stand: Mapping[str, Array],
    symbols: Mapping[str, str],
) -> dict[str, Any]:
    """What the script must know of a profile."""
    entry, frame = profile.entry, ground.frame
    change, spread = _change_scales(profile, ground)
    return {
        "name": entry.name,
        "frame": frame_data(ground),
        "property": {"name": ground.name, "units": ground.units},
        "scale": [_short(end) for end in ground.scale],
        "change": _short(change),
        "spread": _short(spread),
        "iterations": [_short(k) for k in frames.iterations],
        "frames": [[one["stack"], one["index"]] for one in frames.frames],
        "rules": [
            {
                "name": rule.rule,
                "symbol": symbols[rule.rule],
                "frame": frames.picks[rule.rule],
                "stops": rule.iteration is not None,
                "firm": rule.firm,
            }
            for rule in entry.rules
            if rule.rule in frames.picks
        ],
        "chosen": entry.chosen.rule,
        "stacks": {name: packed.about for name, packed in stacks.items()},
        "companions": [[one.name, one.long_name, one.units] for one in ground.companions],
        "meanings": [meaning.replace("_", " ") for meaning in MEANINGS],
        "places": [[name, np.round(where, 3).tolist(), is_star(name)] for name, where in stand.items()],
    } | (
        {}
        if frame.distance is not None
        else {"column": True, "usual": _usual(ground), "band": _band(ground), "ends": _ends(ground)}
    )


def _band(ground: Ground) -> int | None:
    """Which of the companions is the error band, if one is."""
    return None if ground.band is None else ground.companions.index(ground.band)


def _ends(ground: Ground) -> tuple[float, float]:
    """Ends of a column's level axis at the chosen pick."""
    band = None if ground.band is None else ground.band.values[ground.inside]
    return column_ends(ground.model[ground.inside], band, ground.scale)


def _beyond(ground: Ground) -> int:
    """How many values of the usual estimate lie beyond these ends, or are missing as zero or less."""
    if ground.usual is None:
        return 0
    low, high = _ends(ground)
    return int(np.sum(~((ground.usual.values >= low) & (ground.usual.values <= high))))


def _signs(names: list[str]) -> str:
    """What the signs of positions mean."""
    told = (
        ("stars", [name for name in names if is_star(name)]),
        ("triangles", [name for name in names if not is_star(name)]),
    )
    said = "; ".join(f"{sign}: {', '.join(found)}" for sign, found in told if found)
    return said[:1].upper() + said[1:]


def _usual(ground: Ground) -> list[list[float]]:
    """Intervals of the usual estimate: lower and upper end, value."""
    usual = ground.usual
    if usual is None:
        return []
    drawn = np.column_stack([usual.lower, usual.upper, usual.values])
    told: list[list[float]] = drawn[np.isfinite(drawn).all(axis=1)].tolist()
    return told


def frame_data(ground: Ground) -> dict[str, Any]:
    """Where the nodes are, for the script."""
    frame = ground.frame
    return {
        "distance": None if frame.distance is None else [float(frame.distance[0]), float(frame.distance[-1])],
        "elevation": [float(frame.elevation[0]), float(frame.elevation[-1])],
        "surface": None if frame.surface is None else np.round(frame.surface, 3).tolist(),
        "exaggeration": frame.exaggeration,
        "nz": frame.shape[0],
        "nx": frame.shape[1],
    }


def _change_scales(profile: Profile, ground: Ground) -> tuple[float, float]:
    """Ends of the colours for differences from a pick and for the spread between picks."""
    models = ground.shown(profile.history[f"{profile.seen}_at_pick"].values)
    firm = profile.history["firm"].values == 1
    used = models[firm] if np.sum(firm) > 1 else models
    reliable = ground.inside & (ground.flags == RELIABLE)
    reliable = reliable if reliable.any() else ground.inside
    spread = np.percentile((used.max(axis=0) - used.min(axis=0))[reliable], 99.5)
    change = np.percentile(np.abs(models - ground.model)[:, reliable], 99)
    least = 0.02 * (ground.scale[1] - ground.scale[0])
    return max(float(change), least), max(float(spread), least)


def numbers(entry: Entry) -> list[tuple[str, str, str]]:
    """The four numbers of the verdict: label, value, unit."""
    refinement = entry.refinement
    last = refinement.change[-1] if refinement.change else None
    return [
        ("last change of the grid", _percent(last), "%" if last is not None else ""),
        ("order of the changes", "–" if refinement.order is None else minus(f"{refinement.order:.1f}"), ""),
        ("still to come", _percent(refinement.remaining), "%" if refinement.remaining is not None else ""),
        ("misfit at the stop", f"{entry.chosen.chi_square:#.3g}", _recomputed(entry)),
    ]


def _recomputed(entry: Entry) -> str:
    own = entry.chosen.chi_square_recomputed
    return "" if own is None else f"recomputed {own:#.3g}"


def _own_misfit(entry: Entry, *, traced: bool) -> str:
    """What a nonlinear measurement itself makes of the chosen answer's misfit, in words; else nothing."""
    own, linear = entry.chosen.chi_square_recomputed, entry.chosen.chi_square
    if own is None:
        return ""
    still, anew = (", along rays held still", " with rays traced through the answer") if traced else ("", "")
    change = own / linear - 1
    apart = (
        "as good as the same"
        if abs(change) < 0.005
        else f"{percent(abs(change))} {'more' if change > 0 else 'less'}"
    )
    return (
        f"All misfits here are of the last linearisation{still}. Recomputed{anew} (in brackets), that of "
        f"{entry.chosen.rule} is {own:#.3g} instead of {linear:#.3g}: {apart}."
    )


def _other_starts(entry: Entry) -> str:
    said = start_sentence(entry.start_dependence)
    return said and f"{said[0].upper()}{said[1:]}."


def _shares(ground: Ground) -> str:
    """How much of the ground is not to be relied on, in words."""
    flags = ground.flags[ground.inside]
    told = [
        f"{100 * np.mean(flags == flag):.0f} % {words}"
        for flag, words in (
            (POORLY_COVERED, "is poorly covered"),
            (MESH_DEPENDENT, "depends on the grid by itself"),
        )
        if (flags == flag).any()
    ]
    return "Of the ground " + " and ".join(told) + ": hatched below." if told else ""


def _picks(
    profile: Profile, ground: Ground, label: str, symbols: Mapping[str, str]
) -> list[tuple[str, Markup, str]]:
    """The picture at every pick, for print: symbol, picture, caption."""
    history = profile.history
    models = ground.shown(history[f"{profile.seen}_at_pick"].values)
    rules = {rule.rule: rule for rule in profile.entry.rules}
    found = []
    for name, model, at in zip(
        history["rule"].values, models, history["shown_iteration"].values, strict=True
    ):
        rule = rules[str(name)]
        stands = "firm" if rule.firm else "weak"
        where = (
            f"iteration {_number(float(at))}, {stands}" if rule.iteration is not None else "no stop: the last"
        )
        said = f"{ground.long_name} at the pick of {rule.rule}, {where}"
        picture = small(ground, Sight(model, ground.scale, label, said), _ROOM)
        found.append((symbols[rule.rule], picture, f"{rule.rule}: {where}"))
    return found


def _quality(ground: Ground, companion: Companion) -> tuple[Markup, Markup, str, str]:
    """A companion's picture, colour bar, caption and comment."""
    values = companion.values[ground.inside]
    low, high = np.percentile(values, [0, 99])
    label = companion.units or "no unit"
    title = companion.long_name[:1].upper() + companion.long_name[1:]
    sight = Sight(companion.values, (min(float(low), 0.0), max(float(high), 1e-12)), label, title)
    return small(ground, sight, _ROOM), colour_bar(sight, 220), title, companion.comment


def _beside(entry: Entry) -> list[str]:
    """What is told beside the picture: averages that practice asks for, and known ground."""
    told = []
    for mean in entry.averages:
        noise_part = math.nan if mean.noise_part is None else mean.noise_part
        read = ReadAverage(mean.name, mean.property, mean.units, mean.value, noise_part, mean.total_error)
        told.append(read.sentence)
    if entry.overlay is not None:
        told.append(overlay_sentence(entry.overlay.model_dump()))
    return [said[:1].upper() + said[1:] for said in told]


def _extras(entry: Entry) -> list[tuple[str, str]]:
    told = []
    for name, extra in entry.extras.items():
        lone = extra.values is not None and len(extra.values) == 1
        pair = (extra.values[0], extra.deviation) if lone and extra.values else (extra.rms, extra.largest)
        values, units = legible(np.array([value or 0.0 for value in pair]), extra.units)
        first, second = (with_unit(minus(f"{value:.3g}"), units) for value in values)
        said = f"rms {first}, largest {second}"
        if lone:
            said = first if extra.deviation is None else f"{first}, give or take {second}"
        told.append((name.replace("_", " "), said))
    return told


def _cautions(profile: Profile) -> list[str]:
    """What the file says beside the caution that stands on every page."""
    said = str(profile.section.attrs.get("comment", "")).removeprefix(CAUTION).strip()
    return [said] if said else []


def _provenance(profile: Profile) -> dict[str, Any]:
    attributes = profile.section.attrs
    when, _, command = str(attributes.get("history", "")).partition(" ")
    inputs = [line.split("  ", 1) for line in str(attributes.get("input_sha256", "")).splitlines()]
    return {
        "made": when,
        "command": command,
        "inputs": [(name, digest) for digest, name in (pair for pair in inputs if len(pair) == 2)],
        "versions": str(attributes.get("package_versions", "")),
        "configuration": str(attributes.get("configuration", "")),
    }


def _percent(share: float | None) -> str:
    if share is None:
        return "–"
    return minus(percent(share).removesuffix(" %"))


def _number(value: float | None, digits: int = 3) -> str:
    return "–" if value is None else minus(f"{value:.{digits}g}")


def _short(value: float) -> float:
    """Nine digits: the page need not tell more."""
    return float(f"{float(value):.9g}")


@cache
def _asset(name: str) -> str:
    return (files(__package__) / "templates" / name).read_text(encoding="utf-8")


def _digest(text: str) -> str:
    """Source expression of the content policy for exactly this text."""
    return "sha256-" + base64.b64encode(hashlib.sha256(text.encode("utf-8")).digest()).decode("ascii")


@cache
def _environment() -> Environment:
    environment = Environment(
        loader=PackageLoader(__package__, "templates"),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    environment.filters |= {"number": _number, "percent": _percent}
    return environment
