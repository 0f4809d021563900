"""What the page shows of the ground: the property as people read it, its frame, what argues for it."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace

import numpy as np
import xarray as xr
from matplotlib import colormaps
from numpy.typing import NDArray

from stillground.products.figures.aspect import exaggeration
from stillground.products.raster import carried_up
from stillground.products.reliability import RELIABLE
from stillground.products.report.encoding import coarser
from stillground.products.report.folder import Profile
from stillground.products.units import labelled, unit_text
from stillground.protocols import Array

FIELD, CHANGE = "cividis", "PuOr"
_MOST_NODES = 300_000
_ERRORS = ("_total_error", "_noise_part")
# A picture may be this wider than tall; the page has more width than a printed figure.
_FLATTEST, _TALL = 5.0, 1.25


@dataclass(frozen=True)
class Frame:
    """Where the nodes are; a column has one node across.

    Parameters
    ----------
    distance : array, shape (nx,), m, or None for a column
    elevation : array, shape (nz,), m, descending
    surface : array, shape (nx,), or None
        Elevation of the ground surface, m.
    """

    distance: Array | None
    elevation: Array
    surface: Array | None

    @property
    def shape(self) -> tuple[int, int]:
        return self.elevation.size, 1 if self.distance is None else self.distance.size

    @property
    def exaggeration(self) -> int:
        """How many times heights are drawn larger than distances: 1 but for long flat sections."""
        return 1 if self.distance is None else exaggeration((self.distance, self.elevation), _FLATTEST)

    @property
    def tall(self) -> bool:
        """Whether controls find room beside the picture; if not they stand below."""
        return self._flatness < _TALL

    @property
    def _flatness(self) -> float:
        return 0.0 if self.distance is None else float(np.ptp(self.distance) / np.ptp(self.elevation))


@dataclass(frozen=True, eq=False)
class Companion:
    """What argues for or against the answer place by place, as people read it: shape (nz, nx)."""

    name: str
    long_name: str
    units: str
    comment: str
    values: Array


@dataclass(frozen=True)
class Usual:
    """What practice reads off a column's data without an inversion: values between elevations, m."""

    long_name: str
    lower: Array
    upper: Array
    values: Array


@dataclass(frozen=True)
class Ground:
    """One profile's ground; fields have shape (nz, nx), elevation descending, carried up above the surface.

    Parameters
    ----------
    frame : Frame
    name, long_name, units : str
        Of the property as people read it.
    inverse : bool
        It is one over what the files hold.
    model : array
    flags : array of int8
        As in `stillground.products.reliability`, carried up as well.
    inside : array of bool
        Which nodes lie in the ground.
    companions : tuple of Companion
        Coverage first.
    usual : Usual or None
    halvings : int
        How often the page has halved the files' numbers of nodes: more than a screen shows cost bytes alone.
    """

    frame: Frame
    name: str
    long_name: str
    units: str
    inverse: bool
    model: Array
    flags: NDArray[np.int8]
    inside: NDArray[np.bool_]
    companions: tuple[Companion, ...]
    usual: Usual | None = None
    halvings: int = 0

    @property
    def band(self) -> Companion | None:
        """The error that a column is drawn with: the total one after a rehearsal, else the noise part."""
        named = {ending: c for c in self.companions for ending in _ERRORS if c.name.endswith(ending)}
        return next((named[ending] for ending in _ERRORS if ending in named), None)

    @property
    def label(self) -> str:
        """Of an axis or a colour bar."""
        return labelled(self.name, self.units)

    @property
    def scale(self) -> tuple[float, float]:
        """Ends of the colours: the middle 99 % of the reliable ground, as in the figures."""
        reliable = self.model[self.inside & (self.flags == RELIABLE)]
        low, high = np.percentile(reliable if reliable.size else self.model, [0.5, 99.5])
        return float(low), float(low + (max(high - low, 1e-6 * abs(high)) or 1.0))

    def shown(self, stored: Array) -> Array:
        """Pictures of the property from a file, as people read them.

        Shape (..., nz, nx), on any grid; (..., nz) of a column.
        """
        values = np.asarray(stored)
        if self.frame.distance is None:
            values = values[..., np.newaxis]
        values = carried_up(values)
        for _ in range(self.halvings):
            values = coarser(values)
        return 1 / values if self.inverse else values


def ground_of(profile: Profile) -> Ground:
    """What the files of a profile say of its ground."""
    section = profile.section
    answer = section[profile.seen]
    column = "distance" not in profile.dims
    frame = Frame(
        None if column else section["distance"].values,
        section["elevation"].values,
        np.atleast_1d(section["surface_altitude"].values) if "surface_altitude" in section else None,
    )
    flags = section["reliability"].values.reshape(frame.shape)
    stored = answer.values.reshape(frame.shape).astype(np.float64)
    inside = np.isfinite(stored)
    stored = carried_up(stored)
    others = [
        section[name]
        for name in section.data_vars
        if name != profile.seen
        and section[name].dims == answer.dims
        and section[name].attrs.get("coverage_content_type") == "modelResult"
    ]
    told = others[0] if others else answer
    ground = Ground(
        frame=frame,
        name=str(told.name).replace("_", " "),
        long_name=_said(told, "long_name"),
        units=unit_text(_said(told, "units")),
        inverse=bool(others),
        model=1 / stored if others else stored,
        flags=carried_up(flags),
        inside=inside,
        companions=tuple(_companions(section, answer, told, stored)),
        usual=_usual(section, str(told.name)),
    )
    while ground.model.size > _MOST_NODES:
        ground = _halved(ground)
    return ground


def _halved(ground: Ground) -> Ground:
    """The ground on half as many nodes both ways."""
    frame = ground.frame
    down, across = (np.rint(coarser(np.arange(n, dtype=float))).astype(int) for n in frame.shape)
    picked = np.ix_(down, across)
    distance, elevation = (
        None if axis is None else np.linspace(axis[0], axis[-1], -(-axis.size // 2))
        for axis in (frame.distance, frame.elevation)
    )
    assert elevation is not None
    return replace(
        ground,
        frame=Frame(distance, elevation, None if frame.surface is None else coarser(frame.surface)),
        model=coarser(ground.model),
        flags=ground.flags[picked],
        inside=ground.inside[picked],
        companions=tuple(replace(one, values=coarser(one.values)) for one in ground.companions),
        halvings=ground.halvings + 1,
    )


def _companions(
    section: xr.Dataset, answer: xr.DataArray, told: xr.DataArray, stored: Array
) -> Iterator[Companion]:
    for name in _said(answer, "ancillary_variables").split():
        if name not in section or name == "reliability":
            continue
        variable = section[name]
        values = variable.values.reshape(stored.shape).astype(np.float64)
        if not np.isfinite(values).any():
            continue
        values = carried_up(values)
        units, long_name = _said(variable, "units"), _said(variable, "long_name")
        if told is not answer and units == _said(answer, "units"):
            # Small changes of one over the property, told as those of what people read.
            values, units = values / stored**2, _said(told, "units")
            long_name = long_name.replace(_said(answer, "long_name"), _said(told, "long_name"))
        yield Companion(name, long_name, unit_text(units), _said(variable, "comment"), values)


def _usual(section: xr.Dataset, name: str) -> Usual | None:
    values = section.get(f"{name}_of_interval")
    if values is None:
        return None
    lower, upper = (section[f"interval_{end}"].values for end in ("lower", "upper"))
    return Usual(_said(values, "long_name"), lower, upper, values.values)


def _said(variable: xr.DataArray, attribute: str) -> str:
    return str(variable.attrs.get(attribute, ""))


def colours(name: str) -> NDArray[np.uint8]:
    """A colour table, shape (256, 3)."""
    return np.round(255 * colormaps[name](np.linspace(0, 1, 256))[:, :3]).astype(np.uint8)
