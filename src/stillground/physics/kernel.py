"""Any linear measurement whose kernels are known: the integral of each kernel times the ground."""

from __future__ import annotations

import copy
import math
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Annotated, Literal, Self

import numpy as np
import xarray as xr
from numpy.typing import NDArray
from pydantic import AfterValidator, BaseModel, ConfigDict, Field, model_validator

from stillground.counted import counted
from stillground.errors import GridError, SurveyError
from stillground.grid import Grid, carry
from stillground.ground import Ground
from stillground.operators.kernel_integrals import KernelIntegrals
from stillground.protocols import Array, GroundProperty, Kind, Measurement, Scene
from stillground.protocols import Field as GroundField
from stillground.quadrature import RULES
from stillground.survey import require_file, row_numbers, source_of, to_si
from stillground.survey.kernels import LAYOUTS, kernel_layout, read_kernels
from stillground.survey.quantities import InputPath

# Variables that the products have beside the property.
_TAKEN = frozenset(
    [*LAYOUTS[1], "easting", "northing", "crs", "section_crs", "reliability", "mesh_change", "sensitivity"]
)

# Panels in each interval of the table where data of a described ground are integrated, by axes.
_PANELS = {1: 16, 2: 4}
_CANCELLED = 1e-9


def _unit(text: str) -> str:
    to_si(1.0, text, text)
    return text


def _name(text: str) -> str:
    if not (text.isascii() and text.isidentifier()) or text.startswith("_") or text in _TAKEN:
        raise ValueError(
            f"'{text}' cannot name a variable of the products: take letters, digits and underscores, and no "
            f"name that they have already"
        )
    return text


Unit = Annotated[str, AfterValidator(_unit)]
Name = Annotated[str, AfterValidator(_name)]


class KernelSettings(BaseModel):
    """The table [physics] for given kernels."""

    model_config = ConfigDict(extra="forbid", frozen=True)

    kernel: InputPath = Field(
        description="NetCDF with kernel(datum, elevation) or kernel(datum, distance, elevation), or CSV: "
        "header the elevations of the nodes in m, then one row a datum"
    )
    property: Name | None = Field(None, description="the ground property; default: the file's, or 'property'")
    units: Unit | None = Field(None, description="of the property; default: the file's, or '1'")
    data_units: Unit | None = Field(None, description="of the values; default: the file's, or '1'")
    quadrature: Literal["trapezoid", "simpson", "gauss-2", "gauss-3"] = Field(
        "trapezoid", description="nodes and weights on the intervals of each grid"
    )
    weights: Literal["standard", "naive"] = Field(
        "standard", description="'naive' hides the weights from the prior, to see what happens"
    )


class KernelPlan(BaseModel):
    """A planned survey has one datum a kernel, and no places."""

    model_config = ConfigDict(extra="forbid", frozen=True)

    @model_validator(mode="after")
    def _none_lost(self) -> Self:
        if getattr(self, "lost", 0):
            raise ValueError(
                "lost: kernels and data go together by their order; take 0, and set use to 0 later"
            )
        return self


@dataclass(frozen=True, kw_only=True)
class KernelScene(Scene):
    """Given kernels over a column or a section.

    Parameters
    ----------
    table : Grid
        The nodes of the table, with trapezoid weights.
    kernels : array, shape (n_data, n_nodes of the table)
    data, errors : array, shape (n_data,)
    """

    table: Grid
    kernels: Array
    data: Array
    errors: Array

    def assemble(self, grid: Grid) -> Measurement:
        """The measurement on a grid: kernels at its nodes, linear between those of the table."""
        operator = KernelIntegrals(grid, self._at(grid))
        # The order of the table is an order, of depth or time or channel: residuals are white along it.
        groupings = {"table": np.zeros(self.data.size, dtype=np.int64)}
        return Measurement(operator, self.data, self.errors, groupings)

    def _at(self, grid: Grid) -> Array:
        values = self.kernels.T.reshape(*self.table.shape, -1)
        return np.ascontiguousarray(carry(values, self.table, grid).reshape(grid.n_nodes, -1).T)

    def coverage(self, grid: Grid, correlation: tuple[float, ...], rays: Sequence[Array] = ()) -> GroundField:
        """Root of the sum of squared kernels over errors, a Gaussian mean over half a correlation length.

        Relative to its greatest value.
        """
        power = np.sum(np.square(self._at(grid) / self.errors[:, None]), axis=0)
        size = np.sqrt(grid.local_mean(power, correlation))
        return GroundField(
            "sensitivity", size / size.max(), "1", "sensitivity of the data, relative to its greatest"
        )

    def predict(self, ground: Ground) -> Array:
        """Data over a described ground, shape (n_data,).

        Two Gauss points on each of 16 parts of every interval (4 along each axis of a section), against
        the kernels as they are between their nodes: linear.
        """
        panels = _PANELS[len(self.table.shape)]
        rule, n = RULES["gauss-2"], self.table.intervals
        fine = Grid(
            self.table.origin,
            tuple(h / panels for h in self.table.spacing),
            tuple(rule.n_nodes(panels * k) for k in n),
            rule,
        )
        points = np.stack(np.meshgrid(*fine.axes, indexing="ij"), axis=-1).reshape(-1, len(n))
        # Integrals against the hats of the table's nodes, axis by axis: kernels are sums of hats.
        found = (ground.values(points) * fine.weights()).reshape(fine.shape)
        share = rule.nodes(rule.n_nodes(panels)) / panels
        for axis, intervals in enumerate(n):
            parts = np.moveaxis(found, axis, -1)
            parts = parts.reshape(*parts.shape[:-1], intervals, share.size)
            hats = np.zeros((*parts.shape[:-2], intervals + 1))
            hats[..., :-1] += parts @ (1 - share)
            hats[..., 1:] += parts @ share
            found = np.moveaxis(hats, -1, axis)
        return np.asarray(self.kernels @ found.reshape(-1))

    def trace(self, distance: Array) -> tuple[Array, Array]:
        """A frame of its own, distance for easting: kernels have no place in plan."""
        return distance, np.zeros_like(distance)


class Kernel(Kind):
    """Any linear measurement: each datum the integral of its own kernel, from a table, times the ground."""

    name = "kernel"
    ground_property = GroundProperty("property", "1", "ground property", positive=False)
    columns = ("value", "value_error")
    datum = "value"
    datum_units = "1"
    axes: tuple[str, ...] = LAYOUTS[0]
    # Of kernels that are smooth but for jumps; those of smoother ones have more.
    regularity = 0.5
    Settings = KernelSettings
    Plan = KernelPlan

    _file: Path | None = None

    def configured(self, settings: KernelSettings) -> Kernel:
        """With the axes of the kernels, and property and units as settings or their file say.

        Raises
        ------
        SurveyError
            When the file is missing, or says what cannot be used.
        """
        require_file(settings.kernel, "physics.kernel")
        axes, said = kernel_layout(settings.kernel)
        try:
            name = settings.property or _name(said.get("property", "property"))
            units = settings.units or _unit(said.get("property_units", "1"))
            data_units = settings.data_units or _unit(said.get("data_units", "1"))
        except ValueError as error:
            raise SurveyError(str(settings.kernel), [f"attributes of kernel: {error}"]) from error
        made = copy.copy(self)
        long_name = self.ground_property.long_name if name == "property" else name.replace("_", " ")
        made.ground_property = GroundProperty(name, units, long_name, positive=False)
        made.datum_units, made.axes, made._file = data_units, axes, settings.kernel
        return made

    def plan(self, plan: KernelPlan) -> xr.Dataset | None:
        """One datum a kernel."""
        if self._file is None:
            return None
        return xr.Dataset(coords={"entry": ("datum", np.arange(len(read_kernels(self._file).values)))})

    def place(self, survey: xr.Dataset, settings: KernelSettings) -> KernelScene:
        """Gives each datum its kernel: that of its place in the table, rows that are switched off counted.

        Raises
        ------
        SurveyError
            When the kernels cannot be used, are not as many as the table's data, or the rule of quadrature
            does not fit their axes.
        """
        self._require_unit(survey)
        found = read_kernels(settings.kernel)
        count, entry = len(found.values), np.arange(survey.sizes["datum"])
        n_entries = entry.size
        if "entry" in survey.coords:
            entry = survey["entry"].values
            n_entries = int(survey["entry"].attrs.get("of", entry.size))
        if n_entries != count:
            raise SurveyError(
                str(settings.kernel),
                [
                    f"it has {count} kernels, and {survey.attrs.get('source', 'the survey')} has {n_entries} "
                    f"data (those with use = 0 counted): give one a datum, in the order of the table"
                ],
            )
        shape = found.values.shape[1:]
        table = Grid(found.origin, found.spacing, shape)
        kernels = found.values[entry].reshape(entry.size, -1)
        constant = kernels @ table.weights()
        size = np.abs(kernels) @ table.weights()
        given = "value" in survey
        data = survey["value"].values if given else np.zeros(entry.size)
        alone = np.full(entry.size, np.nan)
        seen = np.abs(constant) > _CANCELLED * size
        np.divide(data, constant, out=alone, where=seen)
        return KernelScene(
            lower=tuple(float(axis[0]) for axis in table.axes),
            upper=tuple(float(axis[-1]) for axis in table.axes),
            positions={},
            apparent=alone,
            against={"place in the table": np.asarray(entry + 1.0, dtype=np.float64)},
            facts=(_described(found.axes, table, settings),),
            doubts=_doubts(survey, size, seen),
            inputs=(settings.kernel,),
            grid=_finest(table, found.axes, settings),
            table=table,
            kernels=kernels,
            data=data,
            errors=survey["value_error"].values if given else np.ones(entry.size),
        )

    def _require_unit(self, survey: xr.Dataset) -> None:
        for name in self.columns:
            unit = survey[name].attrs.get("units") if name in survey else None
            if not unit:
                continue
            try:
                same = math.isclose(to_si(1.0, unit, self.datum_units), 1.0, rel_tol=1e-12)
            except ValueError:
                same = False
            if not same:
                raise SurveyError(
                    source_of(survey),
                    [
                        f"column {name} is in '{unit}', but the kernels make data in '{self.datum_units}': "
                        f"physics.data_units must name the unit of the table"
                    ],
                )


def _finest(table: Grid, axes: tuple[str, ...], settings: KernelSettings) -> Grid:
    """The finest rung: the intervals of the table under the rule of quadrature."""
    rule = RULES[settings.quadrature]
    if len(axes) > 1 and not rule.even:
        raise SurveyError(
            str(settings.kernel),
            [
                f"physics.quadrature = '{rule.name}' is for kernels along elevation alone, since sections "
                f"are shown on even nodes; take 'trapezoid' or 'simpson'"
            ],
        )
    try:
        shape = tuple(rule.n_nodes(n) for n in table.intervals)
    except GridError as error:
        counts = " by ".join(str(n) for n in table.shape)
        raise SurveyError(
            str(settings.kernel),
            [f"physics.quadrature: {error}; the table has {counts} nodes, an odd number is needed"],
        ) from error
    return Grid(table.origin, table.spacing, shape, rule, settings.weights == "standard")


def _described(axes: tuple[str, ...], table: Grid, settings: KernelSettings) -> str:
    nodes = " and ".join(
        f"{places.size} nodes from {places[0]:.6g} to {places[-1]:.6g} m along {axis}"
        for axis, places in zip(axes, table.axes, strict=True)
    )
    return f"kernels on {nodes}; {settings.quadrature} quadrature"


def _doubts(survey: xr.Dataset, size: Array, seen: NDArray[np.bool_]) -> tuple[str, ...]:
    said = []
    rows = row_numbers(survey)
    blind = rows[size == 0]
    if blind.size:
        listed = ", ".join(str(row) for row in blind[:5])
        said.append(
            f"{counted(blind.size, 'datum has', 'data have')} a kernel of zeros, which sees nothing "
            f"(row {listed}): is that right?"
        )
    if not seen.any():
        said.append("no kernel sees a constant ground: ground.background is taken as 0, give a value")
    return tuple(said)
