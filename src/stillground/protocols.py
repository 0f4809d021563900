"""The types that travel between the layers, and the contracts of plug-ins.

All are frozen: no step writes into an earlier one. Arrays are float64 and SI unless said
otherwise. A *nodal field* has one axis per dimension of the ground, elevation last and ascending;
flattened in C order it has ``n_nodes`` entries.
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING, Any, Literal, Protocol, runtime_checkable

import numpy as np
from numpy.typing import NDArray
from pylops import LinearOperator

if TYPE_CHECKING:
    from pydantic import BaseModel
    from xarray import Dataset

    from stillground.grid import Grid
    from stillground.ground import Ground

Array = NDArray[np.float64]
Integers = NDArray[np.int64]
Word = Literal["settled", "drifting", "undecided"]


@dataclass(frozen=True)
class GroundProperty:
    """The property of the ground that a kind of measurement sees.

    ``reciprocal`` is (name, units, long_name) of one over the property where people read that
    instead, as velocity for slowness; figures then show the reciprocal. ``positive`` says that nature has
    none below zero.
    """

    name: str
    units: str
    long_name: str
    reciprocal: tuple[str, str, str] | None = None
    positive: bool = True


@dataclass(frozen=True)
class Field:
    """A named nodal field with its units (UDUNITS text), for products and figures."""

    name: str
    values: Array
    units: str
    long_name: str


@dataclass(frozen=True)
class Extra:
    """Unknowns beside the ground, such as a delay of each source, with their prior.

    ``response`` has shape (n_data, n_unknowns), data for one unit of each; ``deviation`` is their
    prior standard deviation in that unit, named by ``units``; their prior mean is zero.
    """

    name: str
    response: Array
    deviation: float
    units: str


@dataclass(frozen=True)
class Found:
    """What came out for an `Extra`: its ``values`` in ``units``.

    ``deviation`` is the posterior standard deviation of an unknown that stands alone, in the same units,
    None of others and where it was not computed.
    """

    values: Array
    units: str
    deviation: float | None = None


@dataclass(frozen=True)
class Measurement:
    """A linear measurement of the ground on one grid; labels and units end here.

    Parameters
    ----------
    operator : pylops.LinearOperator, shape (n_data, n_nodes)
        From a flattened nodal field of the ground property to predicted data.
    data, errors : array, shape (n_data,)
        Observed data and their standard deviations, in the same unit.
    groupings : mapping of str to integer array, shape (n_data,)
        Which data share a source, a receiver, a station: numbers from 0, no labels.
    extras : tuple of Extra
        Unknowns beside the ground.
    background : array, shape (n_nodes,), or None
        The prior mean where the measurement brings its own, as the linearisation of a nonlinear one does;
        None leaves it to the method.
    """

    operator: LinearOperator
    data: Array
    errors: Array
    groupings: Mapping[str, Integers] = field(default_factory=dict)
    extras: tuple[Extra, ...] = ()
    background: Array | None = None


@dataclass(frozen=True, kw_only=True)
class NonlinearMeasurement(ABC):
    """A measurement whose data are no linear function of the ground, on one grid.

    Its unknown is a nodal field u, flattened: of a kind that is ``logarithmic`` the logarithm of the ground
    property, else the property.

    Parameters
    ----------
    data, errors : array, shape (n_data,)
    groupings : mapping
        As in Measurement.
    start : array, shape (n_nodes,)
        The prior mean of u, where the linearising starts.
    other_starts : mapping of str to array, shape (n_nodes,)
        Other prior means that one might have taken, by name, to tell how far the answer depends on it.
    extras : tuple of Extra
        As in Measurement; what they add to the data is no part of `predict`.
    """

    data: Array
    errors: Array
    groupings: Mapping[str, Integers]
    start: Array
    other_starts: Mapping[str, Array]
    extras: tuple[Extra, ...] = ()

    @abstractmethod
    def predict(self, field: Array) -> Array:
        """Data over u, shape (n_nodes,) to (n_data,)."""

    @abstractmethod
    def linearise(self, field: Array) -> tuple[Array, LinearOperator]:
        """Data over u, and their derivative by u as an operator, shape (n_data, n_nodes)."""

    @abstractmethod
    def rays(self, field: Array) -> tuple[Array, ...]:
        """The way of each datum through u, polylines of shape (n_points, n_axes), m.

        One that was not found has no points; none at all where there are no ways to show.
        """


@dataclass(frozen=True)
class Iterate:
    """One step of an iteration in standard form; iterate 0 is the prior mean.

    ``solution`` has shape (n_unknowns, n_columns) and ``residual`` = b - A x has shape
    (n_data, n_columns); both are read-only copies. The rest is None where the method does not have it:
    ``gradient_norm``, the norms of A^T r, shape (n_columns,); ``dual``, a read-only copy of vectors of
    data with ``solution = A^T dual``, shape (n_data, n_columns); ``filter_slope``, shape (n_columns,):
    with ``dual = q(A A^T) b`` the value q(0), minus the slope of the residual polynomial at zero.
    """

    index: int
    solution: Array
    residual: Array
    gradient_norm: Array | None = None
    dual: Array | None = None
    filter_slope: Array | None = None


@dataclass(frozen=True)
class History:
    """What the stopping rules see: one row an iteration, iteration 0 first.

    Everything is of the first column, in standard form: data have unit errors, the ground unit prior
    variance relative to the background. A column is None where the method or the run has none; a rule
    that needs it then gives `Pick.does_not_apply`.

    Parameters
    ----------
    n_data : int
    residual_norm, solution_norm : array, shape (n_rows,)
        Norms of b - A x and of x. The norm of x is the roughness.
    residual_step, step_norm : array, shape (n_rows,)
        Norms of the change of the residual and of x since the row before; 0 in row 0.
        Where the residual meets a norm exactly between two rows follows from ``residual_step``.
    gradient_norm : array or None
    degrees_of_freedom : array or None
        Estimated trace of the map from data to fit.
    error_bound : array or None
        ``(r + r') . z / (2 |z|)`` of the step ``x' = x + A^T z`` that led to the row: while it is at
        least the norm of the noise, that step brought x nearer to the truth. Infinite in row 0.
    filter_slope : array or None
        As in `Iterate`.
    whiteness : mapping of str to array
        By grouping, how far the residual's cumulative periodogram within the groups is from that of
        white noise, in units in which white noise stays under 1.36 in 95 % of cases.
    ended : bool
        The iteration ended by itself at the last row: more iterations would add nothing.
    """

    n_data: int
    residual_norm: Array
    residual_step: Array
    solution_norm: Array
    step_norm: Array
    gradient_norm: Array | None = None
    degrees_of_freedom: Array | None = None
    error_bound: Array | None = None
    filter_slope: Array | None = None
    whiteness: Mapping[str, Array] = field(default_factory=dict)
    ended: bool = False

    @property
    def last(self) -> int:
        """Index of the last iteration."""
        return self.residual_norm.size - 1

    @property
    def advice(self) -> str:
        """What to do where the last iteration came too early for a rule."""
        return "the iteration ended by itself there" if self.ended else "raise solver.iterations"

    @property
    def chi_square(self) -> Array:
        """Mean squared whitened residual, shape (n_rows,)."""
        return self.residual_norm**2 / self.n_data

    def gcv(self, factor: float = 1.0) -> Array | None:
        """``chi_square / (1 - factor dof / n_data)^2``, shape (n_rows,), infinite where no freedom is left.

        None without degrees of freedom.
        """
        if self.degrees_of_freedom is None:
            return None
        left = 1.0 - factor * self.degrees_of_freedom / self.n_data
        # With all freedom used up, as with few data, misfit and rest are both rounding.
        curve = np.divide(self.chi_square, left**2, out=np.full(left.shape, np.inf), where=left > 1e-6)
        return np.asarray(curve)

    def upto(self, last: int) -> History:
        """The history as it stood after iteration ``last``."""
        columns = {
            name: value[: last + 1]
            for name in self.__dataclass_fields__
            if isinstance(value := getattr(self, name), np.ndarray)
        }
        whiteness = {name: column[: last + 1] for name, column in self.whiteness.items()}
        ended = self.ended and last >= self.last
        return History(self.n_data, **columns, whiteness=whiteness, ended=ended)


@dataclass(frozen=True)
class RuleOptions:
    """The numbers that rules take; the defaults of ``[stopping]`` live here.

    ``noise`` is the size of the errors over what is stated, 1 where the stated errors are trusted.
    """

    tau: float = 1.0
    gcv_factor: float = 1.0
    noise: float = 1.0

    @property
    def proviso(self) -> str:
        """What a rule that needs the size of the errors says of it."""
        return (
            "needs the errors to be right" if self.noise == 1 else "size of the errors from cross-validation"
        )


@dataclass(frozen=True)
class Pick:
    """Where a rule would stop: an iteration (fractions allowed) or None, how sure, and why.

    ``applies`` tells a rule that found no stop from one that could not look for it, see
    `does_not_apply`.
    """

    iteration: float | None
    firm: bool
    reason: str
    applies: bool = True

    @classmethod
    def does_not_apply(cls, why: str) -> Pick:
        """No pick, since the history lacks what the rule needs.

        Examples
        --------
        >>> Pick.does_not_apply("this run has no degrees of freedom").reason
        'does not apply: this run has no degrees of freedom'
        """
        return cls(None, False, f"does not apply: {why}", applies=False)


class Rule(Protocol):
    """A pure function of the history."""

    def __call__(self, history: History, options: RuleOptions, /) -> Pick: ...


class Solver(Protocol):
    """An iteration in standard form: endless or until it breaks down, without a tolerance.

    It needs only products with ``operator`` and sums and inner products of vectors. ``b`` has shape
    (n_data, n_columns): independent problems that share the products.
    """

    def __call__(self, operator: LinearOperator, b: Array, /) -> Iterator[Iterate]: ...


@runtime_checkable
class RowBlocks(Protocol):
    """What an operator in standard form offers to methods that go through the data by parts."""

    groupings: Mapping[str, Integers]

    def rows(self, index: Integers) -> LinearOperator:
        """The operator of some data only."""

    def clip(self, solution: Array) -> Array:
        """The nearest solution whose ground is within its bounds; the same where there are none."""


@dataclass(frozen=True)
class Rung:
    """One grid of the ladder with its answer at the finest rung's pick.

    ``model`` is the nodal field of the ground property on this rung's own ``axes``;
    ``iteration`` is this rung's own pick by the chosen rule, None where the rule found none.
    """

    spacing: tuple[float, ...]
    axes: tuple[Array, ...]
    model: Array
    iteration: float | None

    @property
    def n_nodes(self) -> int:
        return self.model.size


@dataclass(frozen=True)
class Verdict:
    """Whether the answer depends on the grid.

    ``order`` is the observed one and ``remaining`` what refinement would still change, relative; both None
    where untold. ``expected`` is the order that theory gives, 0 where there is no limit to come to, None
    where the kind of measurement does not tell it.
    """

    word: Word
    reason: str
    order: float | None
    remaining: float | None
    expected: float | None


@dataclass(frozen=True)
class GridIndex:
    """The published cross-check of a verdict, on one number of the answer: its grid convergence index.

    ``index`` is the uncertainty of the number on the finest grid, relative, with its safety factor;
    ``order`` the observed one, ``extrapolated`` the number without a grid, ``approximate_error`` its last
    change and ``extrapolated_error`` its distance from the extrapolated one, both relative. All None where
    it cannot be told, and then ``reason`` says why.
    """

    index: float | None
    order: float | None
    extrapolated: float | None
    approximate_error: float | None
    extrapolated_error: float | None
    reason: str | None


@dataclass(frozen=True)
class Ladder:
    """The rungs, coarse to fine, and how far the answer moved between them.

    ``change[i]`` is the relative L2 change from rung i to rung i+1 at equal iteration;
    ``pick_drift`` the relative change on the finest rung between its own pick and the pick of the
    rung before it, None with a single rung or where a rule found none. ``jitter`` is the relative change
    that the iteration's own rounding makes there, None where it was not needed. ``index`` is that of the
    root mean square anomaly; ``notes`` are sentences on what of all this does not fit together.
    """

    rungs: tuple[Rung, ...]
    change: tuple[float, ...]
    pick_drift: float | None
    jitter: float | None
    verdict: Verdict
    index: GridIndex
    notes: tuple[str, ...]


@dataclass(frozen=True)
class OuterSteps:
    """How the linearisations of a nonlinear measurement led to the one that the rules judge, on one grid.

    Parameters
    ----------
    misfits : tuple of float
        Chi-square at the prior mean and after each outer step, by the nonlinear measurement itself.
    targets : tuple of float
        Chi-squares that the steps aimed at.
    inner : tuple of array, shape (n_inner + 1,)
        For each step the chi-square of its linearisation over the inner iterations, the last one cut where
        it meets the target.
    reached : bool
        Whether chi-square came to 1, within a quarter.
    homing : tuple of float
        Chi-squares, by the nonlinear measurement, of the answer that the linearisation after the steps gives
        from the prior mean; then after each step from the model part of the way towards that answer.
    """

    misfits: tuple[float, ...]
    targets: tuple[float, ...]
    inner: tuple[Array, ...]
    reached: bool
    homing: tuple[float, ...] = ()


@dataclass(frozen=True)
class Choice:
    """One rule's pick on the finest rung, with what it means for the picture.

    ``iteration`` is where the picture is taken (the last one where the rule found none, so
    ``pick.iteration`` may be None); ``distance`` is the relative L2 distance of its picture from
    the chosen one's, None where that is the background; ``model`` the nodal field there.
    ``chi_square`` is that of the history, of a nonlinear measurement on its last linearisation;
    ``chi_square_recomputed`` is then what the nonlinear measurement itself gives, of the chosen one only.
    """

    rule: str
    pick: Pick
    iteration: float
    chi_square: float
    roughness: float
    distance: float | None
    model: Array
    chi_square_recomputed: float | None = None


@dataclass(frozen=True)
class Rehearsal:
    """How the rules fared on synthetic grounds under the same survey.

    Parameters
    ----------
    ratios : mapping of family to mapping of rule to array, shape (n_twins,)
        Error at the rule's stop over the error of the best iterate, at least 1; in a family whose twins
        it applies to.
    cost : mapping of rule to float
        Mean of the ratio less one in the rule's worst family; of rules that apply to all twins.
    groups : tuple of tuple of str
        Rules with a cost that these twins cannot tell apart, best group first, in each the cheapest first.
    left_out : mapping of rule to str
        Rules that do not apply to some twins, and why.
    total_error, resolved : array, nodal field on the grid rehearsed on
        Root mean square error over twins drawn from the prior at the chosen rule's stops, in the ground
        property's unit, and the share of the truth that comes back, ``cov(fit, truth) / var(truth)``.
    average_errors : mapping of str to float
        Root mean square errors of the scene's averages over the same twins.
    remarks : tuple of str
        What took no part, and why.
    """

    ratios: Mapping[str, Mapping[str, Array]]
    cost: Mapping[str, float]
    groups: tuple[tuple[str, ...], ...]
    left_out: Mapping[str, str]
    total_error: Array
    resolved: Array
    average_errors: Mapping[str, float] = field(default_factory=dict)
    remarks: tuple[str, ...] = ()


@dataclass(frozen=True)
class Variation:
    """One setting changed: what, the stop it led to, and how far the picture moved (relative L2)."""

    name: str
    iteration: float
    distance: float


@dataclass(frozen=True)
class Sensitivity:
    """How far the answer depends on the lengths, the smoothness and the background.

    ``spread`` is the root mean square change over the variations of lengths and smoothness, in the
    property's unit; ``investigation`` the depth-of-investigation index: the change of the answer over
    that of the background, 0 where the data decide and 1 where the background does. Nodal fields.
    """

    variations: tuple[Variation, ...]
    spread: Array
    investigation: Array


@dataclass(frozen=True)
class Pattern:
    """A synthetic pattern of one size through the survey and the stop: what went in and what came back.

    ``truth`` and ``returned`` are relative to the pattern's amplitude; ``share`` is the local regression
    of one on the other, over about the size. Nodal fields.
    """

    name: str
    size: float
    truth: Array
    returned: Array
    share: Array


@dataclass(frozen=True)
class Average:
    """A mean of the ground property, with its errors in the property's unit.

    ``noise_part`` is its standard deviation under the noise, NaN where the user broke off before;
    ``total_error`` the root mean square error over twins drawn from the prior, None without a rehearsal.
    """

    value: float
    noise_part: float
    total_error: float | None


@dataclass(frozen=True)
class Result:
    """One profile's answer on the finest rung, as arrays, with the argument for it.

    Parameters
    ----------
    property : GroundProperty
    axes : tuple of array
        Node coordinates: (distance, elevation) for a section, (elevation,) for a column.
    background : array, nodal field
        The prior mean.
    model : array, nodal field
        The property at the chosen pick.
    mesh_change : array, nodal field
        Local root mean square of the change since the rung before, in the property's unit; NaN with a
        single rung.
    anomaly : float
        Root mean square of the model less its best constant: what changes are relative to.
    coverage : Field
        How well the survey visits the ground.
    predicted : array, shape (n_data,)
        Data that the model at the chosen pick would give.
    observed, errors : array, shape (n_data,)
    groupings : mapping
        As in Measurement.
    history : History
    options : RuleOptions
        As the rules took them.
    choices : tuple of Choice
        One for each rule, in the order asked for.
    chosen : Choice
        The one whose picture is the answer.
    snapshots : tuple of (int, array)
        Iterations kept on the finest rung with their nodal fields.
    ladder : Ladder
    weights : array, shape (n_data,)
        Of the data, 1 but for outliers; the errors of the fit are ``errors / sqrt(weights)``.
    noise : float
        Estimated size of the errors over what is stated.
    extras : mapping of str to Found
        Unknowns beside the ground, such as statics.
    noise_part : array, nodal field
        Standard deviation of the answer under the noise, in the property's unit.
    rehearsal, sensitivity
        Their fields brought to ``axes``; None where they were not asked for.
    remarks : tuple of str
        What the data say of the settings, with what to do.
    interrupted : bool
        The user broke off: this is what had been done by then.
    averages : mapping of str to Average
        Means that practice asks for, by what they are over, as "down to 30 m".
    rays : tuple of array, shape (n_points, n_axes)
        The way of each datum through the answer where they bend with it, m; as in
        `NonlinearMeasurement.rays`.
    outer_steps : OuterSteps or None
        Of a nonlinear measurement, on the finest rung.
    start_dependence : mapping of str to float
        Of a nonlinear measurement, how far the answer on a coarse rung moves from another start, by its
        name: relative L2 change.
    """

    property: GroundProperty
    axes: tuple[Array, ...]
    background: Array
    model: Array
    mesh_change: Array
    anomaly: float
    coverage: Field
    predicted: Array
    observed: Array
    errors: Array
    groupings: Mapping[str, Integers]
    history: History
    options: RuleOptions
    choices: tuple[Choice, ...]
    chosen: Choice
    snapshots: tuple[tuple[int, Array], ...]
    ladder: Ladder
    weights: Array
    noise: float
    extras: Mapping[str, Found]
    noise_part: Array
    rehearsal: Rehearsal | None
    sensitivity: Sensitivity | None
    remarks: tuple[str, ...]
    interrupted: bool = False
    averages: Mapping[str, Average] = field(default_factory=dict)
    rays: tuple[Array, ...] = ()
    outer_steps: OuterSteps | None = None
    start_dependence: Mapping[str, float] = field(default_factory=dict)


@dataclass(frozen=True)
class Progress:
    """What long work yields while it runs: ``done`` of ``total`` steps of ``stage``."""

    stage: str
    done: int
    total: int
    detail: str = ""


@dataclass(frozen=True)
class Known:
    """Known ground to set beside an answer, as layers or a borehole's log.

    Parameters
    ----------
    points : array, shape (n_points, 3)
        East, north and elevation, m.
    values : array, shape (n_points,)
        The ground property; NaN where a point only marks a place, as the top of a layer.
    names : tuple of str
        What each point belongs to; may be empty.
    """

    points: Array
    values: Array
    names: tuple[str, ...]


@dataclass(frozen=True)
class Differences:
    """What practice reads off the data without an inversion: the property between two elevations, m.

    ``lower``, ``upper`` and ``values`` have shape (n_intervals,); values in the property's unit.
    """

    long_name: str
    lower: Array
    upper: Array
    values: Array


@dataclass(frozen=True)
class ErrorEstimate:
    """The size of the errors by data that measure one thing more than once.

    ``ratio`` is their size over what is stated, beside ``constants`` of places where these explain most of
    the differences; ``said`` tells it in words, with its numbers.
    """

    ratio: float
    constants: bool
    said: str


@dataclass(frozen=True, kw_only=True)
class Scene(ABC):
    """One profile's survey set into the ground: positions as arrays, labels behind it.

    Places have one coordinate for each axis of the ground, m, elevation last.

    Parameters
    ----------
    lower, upper : tuple of float
        Bounds of all positions along the axes of the ground.
    positions : mapping of str to array, shape (n, n_axes)
        Distinct places by what stands there, as "source" or "station", in the order of the groupings.
    apparent : array, shape (n_data,)
        The ground property that would explain each datum alone.
    against : mapping of str to array, shape (n_data,)
        What the apparent property is best looked at against, with its unit, as "offset (m)".
    apart : mapping of str to array of bool, shape (n_data,)
        Sorts of data, by name, that such a plot must tell apart; none where there is one sort.
    paths : pair of array, shape (n_data, n_axes) each, or None
        The two ends of every datum's way through the ground; None where it has none.
    surface : pair of array or None
        Distance and elevation of the known ground surface; in a column one point at distance 0.
    depth : float or None
        How far below the lowest ground point the data see, m, where that is below all positions: the
        ground is modelled down to there unless the user says otherwise.
    differences : Differences or None
        In a column, the usual estimate to compare the answer with.
    facts, doubts : tuple of str
        Sentences worth knowing beforehand; and what looks wrong and may not be.
    inputs : tuple of Path
        Files that were read beside the survey.
    grid : Grid or None
        The finest rung, where the survey comes with one; None where the settings make it.
    error_estimate : ErrorEstimate or None
        Where enough data measure one thing more than once.
    """

    lower: tuple[float, ...]
    upper: tuple[float, ...]
    positions: Mapping[str, Array]
    apparent: Array
    against: Mapping[str, Array] = field(default_factory=dict)
    apart: Mapping[str, NDArray[np.bool_]] = field(default_factory=dict)
    paths: tuple[Array, Array] | None = None
    surface: tuple[Array, Array] | None = None
    depth: float | None = None
    differences: Differences | None = None
    facts: tuple[str, ...] = ()
    doubts: tuple[str, ...] = ()
    inputs: tuple[Path, ...] = ()
    grid: Grid | None = None
    error_estimate: ErrorEstimate | None = None

    @abstractmethod
    def assemble(self, grid: Grid) -> Measurement | NonlinearMeasurement:
        """The measurement on a grid."""

    @abstractmethod
    def coverage(self, grid: Grid, correlation: tuple[float, ...], rays: Sequence[Array] = ()) -> Field:
        """How well the survey visits the ground, as means over about a correlation length.

        ``rays`` are those through the ground found, as `NonlinearMeasurement.rays` gives them; none of a
        linear measurement, whose ways are known.
        """

    def averages(self, grid: Grid) -> Mapping[str, Array]:
        """Means of the property that practice asks for, by what they are over: weights of the nodes.

        Shape (n_nodes,) each, of sum 1; none unless a kind has some.
        """
        return {}

    @abstractmethod
    def predict(self, ground: Ground) -> Array:
        """Data over a described ground, in closed form, shape (n_data,)."""

    @abstractmethod
    def trace(self, distance: Array) -> tuple[Array, Array]:
        """East and north of distances along the profile, m; of a column at distance 0."""


class Kind(ABC):
    """A kind of measurement: its columns, its settings, and how it sees the ground.

    ``columns`` are the names that it needs of a survey table, ``datum`` the measured one and
    ``datum_units`` its SI unit; ``axes`` names the ground's axes, elevation last. ``regularity`` is the
    Sobolev regularity of a datum as a functional of the ground, the largest r (but for an arbitrarily small
    rest) such that it is in H^r: -1/2 for integrals along lines in two dimensions, -1 in three, -d/2 for
    values at points, +1/2 for integrals over intervals in one. Answers have a limit under refinement only
    on a prior smoother than ``-regularity``. ``Settings`` is a pydantic model for the table ``[physics]``
    of the configuration, ``Plan`` one for those keys of ``[simulate]`` that say where a survey stands that
    is only planned. A kind that is ``logarithmic`` is reconstructed in the logarithm of its property.
    """

    name: str
    ground_property: GroundProperty
    columns: tuple[str, ...]
    datum: str
    datum_units: str
    axes: tuple[str, ...]
    regularity: float
    Settings: type[BaseModel]
    Plan: type[BaseModel]
    logarithmic: bool = False

    def configured(self, settings: Any) -> Kind:
        """This kind once its ``Settings`` are known: where its property or its axes depend on them."""
        return self

    @abstractmethod
    def place(self, survey: Dataset, settings: Any) -> Scene:
        """Sets a checked survey, on the dimension ``datum``, into the ground."""

    @abstractmethod
    def plan(self, plan: Any) -> Dataset | None:
        """The columns of a planned survey but for the data; None where ``plan`` names no places."""
