"""A result folder read back: what the page says comes from these files and from nowhere else."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path

import pandas as pd
import xarray as xr
from pydantic import BaseModel, ValidationError
from pydantic import Field as Key

from stillground.errors import ResultError
from stillground.products.summary import SUMMARY
from stillground.protocols import Word

_CURVES = ("chi_square", "solution_norm")
_PICKS = ("shown_iteration", "firm", "reason")
_RUNGS = ("spacing", "nodes", "change", "tolerance")
_RAYS = ("ray_distance", "ray_elevation")
_FIT = ("row", "residual_over_error", "weight")


class Chosen(BaseModel):
    rule: str
    iteration: float | None
    chi_square: float
    chi_square_recomputed: float | None = None


class RuleEntry(BaseModel):
    rule: str
    iteration: float | None
    chi_square: float
    firm: bool
    roughness: float
    distance: float | None
    reason: str


class Level(BaseModel):
    spacing: float
    nodes: int
    iteration: float | None


class Refinement(BaseModel):
    verdict: Word
    reason: str
    order: float | None
    expected: float | None = None
    index: float | None = None
    index_reason: str | None = None
    notes: list[str] = []
    change: list[float]
    remaining: float | None
    pick_drift: float | None
    levels: list[Level] = Key(min_length=1)


class Ratios(BaseModel):
    median: float | None
    p90: float | None
    worst: float | None


class RehearsalEntry(BaseModel):
    groups: list[list[str]]
    cost: dict[str, float | None]
    left_out: dict[str, str] = {}
    families: dict[str, dict[str, Ratios]]


class VariationEntry(BaseModel):
    name: str
    iteration: float | None
    distance: float | None


class ExtraEntry(BaseModel):
    units: str
    values: list[float] | None = None
    deviation: float | None = None
    rms: float | None = None
    largest: float | None = None


class AverageEntry(BaseModel):
    name: str
    property: str
    units: str
    value: float
    noise_part: float | None
    total_error: float | None


class OverlayEntry(BaseModel):
    points: int
    compared: int
    out_of_reach: int
    units: str
    error: str
    rms_difference: float | None
    within_two_errors: float | None


class Entry(BaseModel):
    """One profile of ``summary.json``, as far as the page tells it."""

    name: str = Key(min_length=1)
    data: int
    nodes: int
    chosen: Chosen
    rules: list[RuleEntry] = Key(min_length=1)
    refinement: Refinement
    noise: float | None = None
    start_dependence: dict[str, float] = {}
    remarks: list[str] = []
    extras: dict[str, ExtraEntry] = {}
    averages: list[AverageEntry] = []
    overlay: OverlayEntry | None = None
    rehearsal: RehearsalEntry | None = None
    sensitivity: list[VariationEntry] | None = None
    files: dict[str, str]


class Summary(BaseModel):
    """``summary.json``, as far as the page tells it."""

    title: str
    version: str
    verdict: Word
    seconds: float | None = None
    profiles: list[Entry] = Key(min_length=1)


@dataclass(frozen=True)
class Profile:
    """One profile's files, read and found whole.

    Parameters
    ----------
    entry : Entry
    section, history, ladder : xarray.Dataset
        ``section`` is on ``elevation`` alone for a column.
    fit : pandas.DataFrame
    seen : str
        Name of the ground property.
    """

    entry: Entry
    section: xr.Dataset
    history: xr.Dataset
    ladder: xr.Dataset
    fit: pd.DataFrame
    seen: str

    @property
    def dims(self) -> tuple[str, ...]:
        """Of the ground: (elevation, distance), or (elevation,) for a column."""
        return tuple(str(name) for name in self.section[self.seen].dims)

    @property
    def groupings(self) -> tuple[str, ...]:
        """Names of the groupings of the data, from the columns of the fit after the weight."""
        after = list(self.fit.columns)[list(self.fit.columns).index("weight") + 1 :]
        return tuple(name for name in after if "[" not in name)


@dataclass(frozen=True)
class Results:
    """A result folder."""

    folder: Path
    summary: Summary
    profiles: tuple[Profile, ...]


def read_results(folder: Path) -> Results:
    """Reads what `write_report` needs.

    Raises
    ------
    ResultError
        When a file is missing or damaged, naming it and what would help.
    """
    summary = read_summary(folder)
    return Results(folder, summary, tuple(_profile(folder, entry) for entry in summary.profiles))


def read_summary(folder: Path) -> Summary:
    """Reads ``summary.json``; `ResultError` when it is missing or says nothing that can be used."""
    path = folder / SUMMARY
    if not path.is_file():
        raise ResultError(f"{path}: there is no such file; give a folder that 'stillground run' wrote")
    try:
        return Summary.model_validate_json(path.read_bytes())
    except ValidationError as error:
        fault = error.errors()[0]
        key = ".".join(str(part) for part in fault["loc"])
        raise ResultError(
            f"{path}: {key + ': ' if key else ''}{fault['msg']}; it is damaged or of another version: "
            f"get the file again, or repeat the run"
        ) from error


def _profile(folder: Path, entry: Entry) -> Profile:
    ground = "section" if "section" in entry.files else "column"
    history = _dataset(folder, entry, "history", _CURVES + _PICKS)
    if "ray_node_count" in history:
        _require(folder / entry.files["history"], _RAYS, history.variables)
    at_pick = [str(name) for name in history.data_vars if str(name).endswith("_at_pick")]
    if len(at_pick) != 1:
        raise _damaged(folder / entry.files["history"], "holds no pictures at the picks")
    seen = at_pick[0].removesuffix("_at_pick")
    section = _dataset(folder, entry, ground, (seen, "reliability"))
    for name in history["rule"].values:
        if str(name) not in {rule.rule for rule in entry.rules}:
            raise _damaged(folder / entry.files["history"], f"judges by '{name}', and {SUMMARY} does not")
    if history[at_pick[0]].shape[1:] != section[seen].shape:
        raise _damaged(folder / entry.files["history"], f"is not on the grid of {entry.files[ground]}")
    return Profile(
        entry=entry,
        section=section,
        history=history,
        ladder=_dataset(folder, entry, "ladder", (*_RUNGS, f"{seen}_rung_0")),
        fit=_fit(folder, entry),
        seen=seen,
    )


def _dataset(folder: Path, entry: Entry, product: str, needed: tuple[str, ...]) -> xr.Dataset:
    path = _path(folder, entry, product)
    try:
        dataset = xr.load_dataset(path, engine="netcdf4", mask_and_scale=False, decode_times=False)
    except (OSError, ValueError, RuntimeError) as error:
        raise _damaged(path, f"is no NetCDF file that can be read ({error})") from error
    _require(path, needed, dataset.variables)
    return dataset


def _fit(folder: Path, entry: Entry) -> pd.DataFrame:
    path = _path(folder, entry, "fit")
    try:
        table = pd.read_csv(path)
    except (ValueError, OSError) as error:
        raise _damaged(path, f"is no table that can be read ({error})") from error
    _require(path, _FIT, dict.fromkeys(table.columns))
    words = [str(name) for name in table.columns if table[name].dtype.kind not in "if"]
    if words or len(table) != entry.data:
        what = f"has words in column '{words[0]}'" if words else f"has {len(table)} rows, not {entry.data}"
        raise _damaged(path, what)
    return table


def _path(folder: Path, entry: Entry, product: str) -> Path:
    name = entry.files.get(product)
    if name is None:
        raise ResultError(
            f"{folder / SUMMARY}: profile '{entry.name}' has no {product} file, and the report is made from "
            f'it; run again with "{product}" among output.products'
        )
    path = folder / name
    if not path.resolve().is_relative_to(folder.resolve()):
        raise ResultError(f"{folder / SUMMARY}: '{name}' of profile '{entry.name}' lies outside the folder")
    if not path.is_file():
        raise ResultError(f"{path}: there is no such file; the report needs it beside {SUMMARY}")
    return path


def _require(path: Path, needed: tuple[str, ...], found: Mapping[object, object]) -> None:
    for name in needed:
        if name not in found:
            raise _damaged(path, f"holds no '{name}'")


def _damaged(path: Path, what: str) -> ResultError:
    return ResultError(
        f"{path}: {what}; it is damaged or of another version: get the file again, or repeat the run"
    )
