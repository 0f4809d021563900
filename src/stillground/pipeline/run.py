"""The main job: from a configuration to the products of all its profiles."""

from __future__ import annotations

import hashlib
import json
import os
import time
from collections.abc import Generator, Mapping, Sequence
from dataclasses import dataclass
from importlib.metadata import version
from pathlib import Path
from typing import Any

import xarray as xr

from stillground.config import Config, from_mapping, load
from stillground.errors import ConfigError
from stillground.pipeline.advice import advise
from stillground.pipeline.answer import answer
from stillground.pipeline.grids import plan_grids
from stillground.pipeline.inputs import refuse_to_replace
from stillground.pipeline.labels import ProfileResult, label, provenance, survey_crs
from stillground.pipeline.profiles import Profile, place, read_overlays, read_profiles
from stillground.pipeline.site import line, plan_slices, recalled, write_site
from stillground.products.curtain import curtain_dataset, write_curtain
from stillground.products.figures import write_figures
from stillground.products.fit import write_fit
from stillground.products.history import write_history
from stillground.products.ladder import write_ladder
from stillground.products.line import Line
from stillground.products.overlay import write_overlay
from stillground.products.picture import product, write_picture
from stillground.products.points import points_table, write_points
from stillground.products.provenance import Provenance
from stillground.products.report import REPORT, write_report
from stillground.products.summary import SUMMARY, run_summary, write_summary
from stillground.progress import finish
from stillground.protocols import Progress
from stillground.survey import source_of
from stillground.whole import require_writable


@dataclass(frozen=True)
class Begun:
    """One profile about to be reconstructed, with what settings will not do; yielded before its progress."""

    profile: Profile
    advice: tuple[str, ...]


@dataclass(frozen=True)
class Done:
    """One profile finished and written; yielded between the progress of profiles."""

    result: ProfileResult
    folder: Path


@dataclass(frozen=True)
class Outcome:
    """A finished run: its folder and its summary as in ``summary.json``."""

    folder: Path
    summary: dict[str, Any]
    interrupted: bool = False


def run(
    config: Config, text: str, folder: Path, *, command: str = "stillground run", resume: bool = False
) -> Generator[Progress | Begun | Done, None, Outcome]:
    """Reconstructs every profile of a configuration and writes its products.

    Parameters
    ----------
    config : Config
    text : str
        The configuration as written, for the products' provenance.
    folder : Path
        Where to write; made if it does not exist.
    command : str
        For the products' history.
    resume : bool
        Keep profiles that ``folder`` holds from the same configuration, inputs and version.

    Yields
    ------
    Progress, Begun or Done

    Returns
    -------
    Outcome

    Raises
    ------
    StillgroundError
        For anything the user can mend, before anything of the profile is written.

    Notes
    -----
    When it is interrupted from the keyboard while it iterates, what is done is judged and written, and the
    run ends there; at other times the summary of the profiles finished so far is written.
    """
    begin = time.perf_counter()
    yield Progress("reading the survey", 0, 1)
    profiles, known = read_profiles(config), read_overlays(config)
    refuse_to_replace(profiles, config, folder)
    plans = {profile.name: plan_grids(profile, config) for profile in profiles}
    slicing = None
    if "map" in config.output.products:
        slicing = plan_slices([(profile, plans[profile.name][-1]) for profile in profiles], config)
    origin = provenance(profiles, config, text, command)
    require_writable(folder)
    yield Progress("reading the survey", 1, 1)

    mark = _fingerprint(origin)
    shared = bool({"map", "survey"} & set(config.output.products))
    needed = {"fit", product(len(config.kind.axes))} if shared else set()
    entries = _kept(folder, mark, needed) if resume else {}
    lines: dict[str, Line] = {}
    files: dict[str, str] = {}
    summary: dict[str, Any] = {}
    interrupted = False
    try:
        for profile in profiles:
            if profile.name in entries:
                if shared:
                    files_of = entries[profile.name]["files"]
                    lines[profile.name] = recalled(folder, files_of, profile, plans[profile.name][0])
                continue
            grids = plans[profile.name]
            yield Begun(profile, advise(profile, grids, config))
            arrays = yield from answer(profile, grids, config)
            result = label(profile, grids, arrays, config, origin, known)
            # Until the new ones are there, nothing must speak for files that are being replaced.
            for name in (SUMMARY, REPORT):
                (folder / name).unlink(missing_ok=True)
            written = yield from _write(folder, result, config)
            entries[profile.name] = result.summary(written) | {"fingerprint": mark}
            lines[profile.name] = line(result)
            yield Done(result, folder)
            interrupted = arrays.interrupted
            if interrupted:
                break
        # Given kernels stand nowhere: a run of these alone has no map.
        standing = [each for each in lines.values() if len(each.stations)]
        if shared and standing:
            yield Progress("writing the map", 0, 1)
            files = _names(folder, write_site(folder, standing, slicing, config, origin))
            yield Progress("writing the map", 1, 1)
    finally:
        if entries:
            seconds = None if "SOURCE_DATE_EPOCH" in os.environ else time.perf_counter() - begin
            order = [profile.name for profile in profiles if profile.name in entries]
            summary = run_summary(
                config.title, version("stillground"), seconds, [entries[name] for name in order], files
            )
            write_summary(folder, summary)
    if "report" in config.output.products:
        yield Progress("writing the report", 0, 1)
        write_report(folder)
        yield Progress("writing the report", 1, 1)
    return Outcome(folder, summary, interrupted)


def run_config(
    path: str | Path, *, out: str | Path | None = None, overrides: Sequence[str] = ()
) -> tuple[ProfileResult, ...]:
    """Runs a configuration file without a word, as ``stillground run`` does, and keeps the results.

    Parameters
    ----------
    path : str or Path
    out : str or Path, optional
        Default: ``output.folder`` of the configuration.
    overrides : sequence of str
        ``key=value`` each.

    Returns
    -------
    tuple of ProfileResult
        One for each profile; their products are in the output folder.
    """
    config, text = load(path, overrides)
    events = run(config, text, output_folder(config, path, out))
    return tuple(event.result for event in events if isinstance(event, Done))


def output_folder(config: Config, path: str | Path, out: str | Path | None = None) -> Path:
    """Where a run writes: what the caller says, else the configuration, else results/<its name>."""
    return Path(out or config.output.folder or Path("results") / Path(path).stem)


def reconstruct_survey(
    survey: xr.Dataset, /, *, kind: str = "straight-ray", title: str = "survey", **tables: Any
) -> ProfileResult:
    """Reconstructs one profile from a survey in memory, in one call, and writes nothing.

    Parameters
    ----------
    survey : xarray.Dataset
        On the dimension ``datum``, SI, as `stillground.read_survey` returns it.
    kind : str
        Kind of measurement.
    title : str
    **tables : mapping
        Tables of the configuration by name, with its keys and units: at least ``ground``, as in
        ``ground={"spacing": "0.5 m", "correlation": {"horizontal": "4 m", "vertical": "2 m"}}``; a table
        ``survey`` may name the ``crs``.

    Returns
    -------
    ProfileResult

    Raises
    ------
    StillgroundError
        For a survey or settings that cannot be used.
    """
    source = source_of(survey)
    given = dict(tables.pop("survey", {})) | {"kind": kind, "files": [source]}
    data = {"title": title, "survey": given, **tables}
    config = from_mapping(data)
    found = place(survey, Path(source).stem, config)
    if len(found) > 1:
        names = ", ".join(profile.name for profile in found)
        raise ConfigError(f"{source} holds {len(found)} profiles ({names}); select one line of it")
    text = json.dumps(data, default=str)
    origin = provenance(found, config, text, "stillground.reconstruct_survey")
    grids = plan_grids(found[0], config)
    answered = finish(answer(found[0], grids, config))
    return label(found[0], grids, answered, config, origin, read_overlays(config))


def _write(folder: Path, result: ProfileResult, config: Config) -> Generator[Progress, None, dict[str, str]]:
    """Writes one profile's products; file names by product."""
    wanted = config.output.products
    yield Progress("writing products", 0, 2)
    written = {
        "ladder": write_ladder(folder, result.name, result.ladder),
        "fit": write_fit(folder, result.name, result.fit),
    }
    if "section" in wanted:
        picture = write_picture(folder, result.name, result.picture)
        written[product(len(result.arrays.axes))] = picture
    if "history" in wanted:
        written["history"] = write_history(folder, result.name, result.history)
    if len(result.arrays.axes) > 1:
        crs = survey_crs(config)
        if "curtain" in wanted:
            written["curtain"] = write_curtain(folder, result.name, curtain_dataset(result.picture, crs))
        if "points" in wanted:
            written["points"] = write_points(folder, result.name, points_table(result.picture, crs))
    if result.overlay is not None:
        written["overlay"] = write_overlay(folder, result.name, result.overlay)
    yield Progress("writing products", 1, 2)
    if "figures" in wanted:
        write_figures(folder / "figures", result.name, result.figures)
    yield Progress("writing products", 2, 2)
    return _names(folder, written)


def _names(folder: Path, written: Mapping[str, Path]) -> dict[str, str]:
    return {product: path.relative_to(folder).as_posix() for product, path in written.items()}


def _fingerprint(origin: Provenance) -> str:
    parts = [origin.config_text, *(f"{n} {d}" for n, d in origin.inputs.items()), version("stillground")]
    return hashlib.sha256("\n".join(parts).encode()).hexdigest()


def _kept(folder: Path, mark: str, needed: set[str]) -> dict[str, dict[str, Any]]:
    """Entries of an earlier summary made from the same things whose files, ``needed`` ones too, are there."""
    path = folder / SUMMARY
    if not path.is_file():
        return {}
    try:
        entries = json.loads(path.read_text(encoding="utf-8"))["profiles"]
        return {
            entry["name"]: entry
            for entry in entries
            if entry.get("fingerprint") == mark
            and needed <= entry["files"].keys()
            and all((folder / name).is_file() for name in entry["files"].values())
        }
    except (ValueError, KeyError, TypeError, AttributeError) as error:
        raise ConfigError(f"{path}: is no summary of a run ({error}); run without --resume") from error
