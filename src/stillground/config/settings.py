"""The settings of a run, one class a table of the configuration; defaults live here and nowhere else.

Units are gone once a setting is read: metres, and SI for what is measured. What the kind of survey
decides (the unit of its errors, its ground property) comes in the validation context.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from functools import cached_property
from typing import Annotated, Any, Literal, Self, get_args

import pyproj
from pydantic import (
    AfterValidator,
    BaseModel,
    BeforeValidator,
    ConfigDict,
    Field,
    SerializeAsAny,
    Strict,
    ValidationInfo,
    WithJsonSchema,
    model_validator,
)

from stillground import plugins
from stillground.errors import PluginError
from stillground.protocols import GroundProperty, Kind, RuleOptions
from stillground.survey import quantity
from stillground.survey.quantities import Coordinate, Depth, InputPath, Length


def _datum(text: Any, info: ValidationInfo) -> float:
    kind: Kind = (info.context or {})["kind"]
    value = quantity(text, kind.datum_units)
    if value <= 0:
        raise ValueError(f"must be above zero; got '{text}'")
    return value


def _property(text: Any, info: ValidationInfo) -> float:
    seen: GroundProperty = (info.context or {})["kind"].ground_property
    units = (seen.units,) if seen.reciprocal is None else (seen.units, seen.reciprocal[1])
    value = quantity(text, units)
    if seen.reciprocal is not None and value <= 0:
        raise ValueError(f"must be above zero; got '{text}'")
    return value


def _background(text: Any, info: ValidationInfo) -> float | None:
    return None if text == "fit" else _property(text, info)


def _crs(text: str) -> str:
    try:
        crs = pyproj.CRS.from_user_input(text)
    except pyproj.exceptions.CRSError as error:
        raise ValueError(f"'{text}' is no known coordinate system; give one like 'EPSG:32631'") from error
    if not crs.is_projected:
        raise ValueError(
            f"'{text}' ({crs.name}) has its coordinates in degrees, the survey in lengths; give the "
            f"projected system of the survey, like 'EPSG:32631', or leave crs out for a local frame"
        )
    return text


def _both_ways(value: Any) -> Any:
    if isinstance(value, Mapping):
        return value
    if not quantity(value, "m") > 0:
        raise ValueError(f"must be above zero; got '{value}'")
    return {"horizontal": value, "vertical": value}


def _solver_name(name: str) -> str:
    try:
        plugins.solver(name)
    except PluginError as error:
        raise ValueError(error) from error
    return name


def _rule_name(name: str) -> str:
    try:
        plugins.rule(name)
    except PluginError as error:
        raise ValueError(error) from error
    return name


Datum = Annotated[float, BeforeValidator(_datum), WithJsonSchema({"type": "string", "examples": ["0.1 ms"]})]
PropertyValue = Annotated[
    float, BeforeValidator(_property), WithJsonSchema({"type": "string", "examples": ["1900 m/s"]})
]
Background = Annotated[
    float | None,
    BeforeValidator(_background),
    WithJsonSchema({"type": "string", "examples": ["fit", "1900 m/s"]}),
]
SolverName = Annotated[str, AfterValidator(_solver_name)]
RuleName = Annotated[str, AfterValidator(_rule_name)]


Product = Literal["section", "map", "survey", "curtain", "points", "history", "figures", "report"]

Number = Annotated[float, Strict()]
Count = Annotated[int, Strict()]


class Table(BaseModel):
    """A table of the configuration: unknown keys are errors."""

    model_config = ConfigDict(extra="forbid", frozen=True)


class SurveySettings(Table):
    kind: str = Field(description="kind of measurement, see 'stillground plugins'")
    files: list[InputPath] = Field(min_length=1, description="survey tables, relative to this file")
    crs: Annotated[str, AfterValidator(_crs)] | None = Field(
        None, description="projected coordinate system of x and y; none: a local frame"
    )
    columns: dict[str, str] = Field({}, description="our column name = the table's")
    units: dict[str, str] = Field({}, description="our column name = its unit, where the table gives none")


class ErrorSettings(Table):
    floor: Datum | None = Field(None, description="standard deviation of the data, with unit")
    relative: Number | None = Field(None, gt=0, lt=1, description="and as a share of the datum")
    trust: bool = Field(True, description="false: rules that need the size of the errors take it from gcv")
    outliers: Literal["auto", "tukey", "off"] = Field(
        "auto", description="reweight outlying data: where the data say so, always, never"
    )
    statics: dict[str, Annotated[Number, Field(gt=0)]] = Field(
        {}, description="constants of each group, as 'source' or 'configuration', as unknowns: size in errors"
    )
    delay: Literal["fit", "off"] = Field("off", description="one constant common to all data as an unknown")


class Pair(Table):
    """A length along the profile and one down."""

    horizontal: Length | None = None
    vertical: Length

    def along(self, axes: Sequence[str]) -> tuple[float, ...]:
        """One length for each axis of the ground, m."""
        horizontal = self.vertical if self.horizontal is None else self.horizontal
        return tuple(self.vertical if axis == "elevation" else horizontal for axis in axes)


PairOrOne = Annotated[Pair, BeforeValidator(_both_ways, json_schema_input_type=str | Pair)]
"""One length for both ways, or a pair."""


class GroundSettings(Table):
    spacing: PairOrOne | None = Field(
        None, description="distance of nodes on the finest rung; required but where the survey has a grid"
    )
    correlation: PairOrOne = Field(description="lengths over which the ground is alike")
    smoothness: Number = Field(2.0, ge=0, le=8, description="exponent s of the prior; 0 is white")
    margin: Length | None = Field(
        None, description="ground kept around the positions; default: half the correlation length"
    )
    depth: Length | None = Field(
        None,
        description="below the lowest ground point; default: what the kind sees, or the deepest position",
    )
    background: Background = Field(None, description="'fit' (default), or a value with unit")
    bounds: tuple[PropertyValue, PropertyValue] | None = Field(
        None, description="least and greatest value; kept by Kaczmarz' methods"
    )


class SolverSettings(Table):
    method: SolverName = Field("lsqr", description="see 'stillground plugins'")
    iterations: Count = Field(80, ge=2, le=10_000, description="how far it runs before it is judged")
    order: Literal["golden", "cyclic", "random"] | None = Field(
        None, description="Kaczmarz: order of the parts in a sweep; default golden"
    )
    relaxation: Number | None = Field(None, gt=0, lt=2, description="Kaczmarz: length of a step; default 1")
    groups: Count | None = Field(None, ge=1, description="block Kaczmarz: groups of sources; default 5")
    ridge: Number | None = Field(
        None, ge=0, description="block Kaczmarz: in mean squared row norms; default 1, symmetric 30"
    )

    reorthogonal: bool | None = Field(
        None, description="lsqr, cgls: keep vectors orthogonal against rounding; default true"
    )

    @property
    def options(self) -> dict[str, Any]:
        """What is set beyond the method and its length."""
        return self.model_dump(exclude={"method", "iterations"}, exclude_none=True)

    @model_validator(mode="after")
    def _options_apply(self) -> Self:
        known = plugins.options(self.method)
        for name in self.options:
            if name not in known:
                takes = f"it takes {', '.join(known)}" if known else "it takes no options"
                raise ValueError(f"{name} does not apply to method = '{self.method}'; {takes}")
        return self


class StoppingSettings(Table):
    rules: list[RuleName] | None = Field(None, min_length=1, description="default: all that are registered")
    choose: RuleName = Field("gcv", description="the rule whose picture is the answer")
    tau: Number = Field(
        RuleOptions.tau, gt=0, description="discrepancy target: mean squared whitened residual = tau^2"
    )

    gcv_factor: Number = Field(
        RuleOptions.gcv_factor, ge=1, le=3, description="gcv: price of a degree of freedom; 1.4 is wary"
    )

    @property
    def judged(self) -> tuple[str, ...]:
        """Names of the rules to judge by."""
        if self.rules is None:
            return tuple(plugin.name for plugin in plugins.registered("rules"))
        return tuple(dict.fromkeys(self.rules))

    @model_validator(mode="after")
    def _chosen_is_judged(self) -> Self:
        if self.choose not in self.judged:
            raise ValueError(
                f"choose = '{self.choose}' is not among rules = {list(self.judged)}; add it there"
            )
        return self


class RefinementSettings(Table):
    levels: Count = Field(4, ge=1, le=8, description="rungs: 2^(levels-1), ..., 2, 1 times the spacing")
    tolerance: Number = Field(0.02, gt=0, lt=1, description="relative change that counts as none")


class RehearsalSettings(Table):
    twins: Count = Field(
        0,
        ge=0,
        le=1000,
        description="grounds in each family that 'run' rehearses on; 0: none, 30 is enough",
    )
    seed: Count = Field(0, ge=0)
    patterns: list[Length] = Field(
        [], description="sizes of checkerboards and bodies for 'rehearse --pattern'; default: by the lengths"
    )

    @model_validator(mode="after")
    def _several(self) -> Self:
        if self.twins == 1:
            raise ValueError("twins = 1 tells nothing; take 30, or 0 for none")
        return self


class SensitivitySettings(Table):
    vary: bool = Field(False, description="repeat with other lengths, smoothness and backgrounds")


class MapSettings(Table):
    """How ``map.nc`` cuts all profiles of the run."""

    spacing: Length | None = Field(
        None,
        description="default: an eighth of the horizontal correlation, more where that is too many nodes",
    )
    depths: list[Depth] | None = Field(
        None, min_length=1, description="below the ground; default: every vertical correlation length"
    )
    elevations: list[Coordinate] | None = Field(None, min_length=1, description="instead of depths")
    reach: Length | None = Field(
        None, description="how far from a line it shows anything; default: the horizontal correlation length"
    )

    @model_validator(mode="after")
    def _depths_or_elevations(self) -> Self:
        if self.depths is not None and self.elevations is not None:
            raise ValueError("give depths or elevations, not both")
        return self


class OutputSettings(Table):
    folder: str | None = Field(None, description="default: results/<config name> where you are")
    products: list[Product] = Field(list(get_args(Product)), description="beside summary, ladder and fit")

    @model_validator(mode="after")
    def _report_has_its_files(self) -> Self:
        missing = [name for name in ("section", "history") if name not in self.products]
        if "report" in self.products and missing:
            raise ValueError(
                f"products: 'report' is made from the files of {' and '.join(missing)}; add them, or "
                f"leave 'report' out"
            )
        return self


class Point(Table):
    """A point of the ground; a column has no distance."""

    distance: Coordinate | None = None
    elevation: Coordinate

    @model_validator(mode="after")
    def _has_every_axis(self, info: ValidationInfo) -> Self:
        column = "distance" not in (info.context or {})["kind"].axes
        if column and self.distance is not None:
            raise ValueError("leave distance out: the ground of this kind of survey is a column")
        if not column and self.distance is None:
            raise ValueError("distance is missing")
        return self

    @property
    def place(self) -> tuple[float, ...]:
        """Coordinates along the axes of the ground, m."""
        return (self.elevation,) if self.distance is None else (self.distance, self.elevation)


class BlobSettings(Table):
    """A Gaussian body; ``radii`` are its standard deviations."""

    centre: Point
    radii: PairOrOne
    value: PropertyValue


class DiscSettings(Table):
    """A disc or ellipse with a sharp edge."""

    centre: Point
    radii: PairOrOne
    value: PropertyValue


class LayerSettings(Table):
    """A layer; without ``top`` or ``bottom`` it goes on for ever that way."""

    top: Coordinate | None = None
    bottom: Coordinate | None = None
    dip: Number = Field(0.0, description="rise over run along the profile; top and bottom hold at distance 0")
    value: PropertyValue

    @model_validator(mode="after")
    def _dips_along_something(self, info: ValidationInfo) -> Self:
        if self.dip and "distance" not in (info.context or {})["kind"].axes:
            raise ValueError("leave dip out: the ground of this kind of survey is a column of level layers")
        return self


class BoxSettings(Table):
    """A rectangle with level and upright sides."""

    lower: Point
    upper: Point
    value: PropertyValue


class SimulateSettings(Table):
    """The described ground and the table to make; the kind adds where a planned survey stands."""

    output: InputPath = Field(description="table to write, relative to this file")
    seed: Count = Field(0, ge=0)
    noise: Datum | None = Field(None, description="standard deviation of the noise, with unit")
    relative_noise: Number = Field(0.0, ge=0, lt=1, description="and as a share of the datum")
    lost: Number = Field(0.0, ge=0, lt=1, description="share of the measurements that is missing")
    background: PropertyValue
    blob: list[BlobSettings] = []
    disc: list[DiscSettings] = []
    layer: list[LayerSettings] = []
    box: list[BoxSettings] = []


class OverlaySettings(Table):
    """Known ground to set beside the answer: layers, a borehole's log."""

    file: InputPath = Field(description="table x y z, with value and name where it has them")


class Config(Table):
    """All settings of a run, in SI."""

    @cached_property
    def kind(self) -> Kind:
        """The kind of survey, once its own settings are known."""
        return plugins.kind(self.survey.kind).configured(self.physics)

    @model_validator(mode="after")
    def _background_within_bounds(self) -> Self:
        bounds, background = self.ground.bounds, self.ground.background
        if bounds is not None and background is not None and not min(bounds) <= background <= max(bounds):
            raise ValueError("ground.background lies outside ground.bounds; mend one of them")
        return self

    @model_validator(mode="after")
    def _rehearsal_has_a_finer_grid(self) -> Self:
        if self.rehearsal.twins and self.refinement.levels < 2:
            raise ValueError(
                "refinement.levels: rehearsals take data from a finer grid; take 2 or more, or twins = 0"
            )
        return self

    @model_validator(mode="after")
    def _bounds_are_kept(self) -> Self:
        if self.ground.bounds is not None and not plugins.keeps_bounds(self.solver.method):
            raise ValueError(
                f"ground.bounds: method = '{self.solver.method}' cannot keep bounds; of Kaczmarz' "
                f"methods 'kaczmarz' and 'block-kaczmarz' can: take one of them, or leave the bounds out"
            )
        return self

    title: str = Field(min_length=1)
    survey: SurveySettings
    errors: ErrorSettings = ErrorSettings()
    ground: GroundSettings
    solver: SolverSettings = SolverSettings()
    stopping: StoppingSettings = StoppingSettings()
    refinement: RefinementSettings = RefinementSettings()
    rehearsal: RehearsalSettings = RehearsalSettings()
    sensitivity: SensitivitySettings = SensitivitySettings()
    map: MapSettings = MapSettings()
    output: OutputSettings = OutputSettings()
    physics: SerializeAsAny[BaseModel] = Field(Table(), description="settings of the kind of survey")
    overlay: list[OverlaySettings] = Field([], description="known ground to set beside the answer")
    simulate: SimulateSettings | None = Field(None, description="a described ground to make a survey over")
