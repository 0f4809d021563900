"""One profile's answer: climb the ladder, then what argues for it, then what the products need."""

from __future__ import annotations

from collections.abc import Callable, Generator, Iterator, Sequence
from dataclasses import replace
from functools import partial

import numpy as np

from stillground import plugins
from stillground.config import Config
from stillground.errors import ConfigError
from stillground.grid import Grid, prolong
from stillground.pipeline.capacity import SNAPSHOT_VALUES
from stillground.pipeline.grids import correlation
from stillground.pipeline.linear import Linear, asked, linear_ladder, start_dependence
from stillground.pipeline.logarithm import in_unknown, out_of_the_logarithm
from stillground.pipeline.profiles import Profile
from stillground.pipeline.recomputed import recomputed
from stillground.pipeline.remarks import remark
from stillground.pipeline.simulate import described_ground
from stillground.progress import staged
from stillground.protocols import (
    Array,
    Average,
    Choice,
    Found,
    Measurement,
    NonlinearMeasurement,
    Progress,
    Rehearsal,
    Result,
    RuleOptions,
    Sensitivity,
)
from stillground.reconstruct import Method, find_outliers, weighted_errors
from stillground.refinement import Climb, climb
from stillground.rehearsal import rehearse
from stillground.sensitivity import vary
from stillground.solve.columns import norm
from stillground.uncertainty import extra_deviations, noise_part

# Repeated work goes on the finest rung of no more nodes than this; what it tells has settled there.
_REPEATED_NODES = 6000
_MEMBERS = 32
# A linearisation reaches data whose misfit at it is no larger, as in an outer step's fall to a quarter.
_TRUSTED = 4.0


def answer(profile: Profile, grids: Sequence[Grid], config: Config) -> Generator[Progress, None, Result]:
    """Reconstructs a profile on its ladder of grids, coarse to fine.

    Yields
    ------
    Progress

    Returns
    -------
    Result
    """
    method = plan_method(config)
    repeated = grids[repeated_rung(grids)]
    linear = yield from linear_ladder(profile, config, grids, method)
    method = asked(linear, method)
    if config.errors.outliers != "off" and not linear.outer:
        always = config.errors.outliers == "tukey"
        work = find_outliers(linear(repeated), repeated, method, always=always)
        linear = replace(linear, weights=(yield from staged(work, "looking for outliers")))
    weights = linear.weights

    top = yield from climb(linear, linear.grids, method, config.refinement.tolerance, config.kind.regularity)
    finest = top.finest
    chosen_stop = finest.stop(method.choose)
    rung = top.rungs[min(repeated_rung(grids), len(top.rungs) - 1)]
    scatter, average_scatter = np.full(rung.grid.shape, np.nan), dict[str, float]()
    averages = profile.scene.averages
    rehearsal = sensitivity = None
    deviations: dict[str, float] = {}
    moved_by_start: dict[str, float] = {}
    interrupted = top.interrupted or len(linear.grids) < len(grids)
    try:
        if not interrupted:
            scatter, average_scatter = yield from noise_part(
                rung, chosen_stop, members=_MEMBERS, seed=0, averages=averages(rung.grid)
            )
            # Of a nonlinear measurement the start, which is fitted too, takes up part of an extra unknown.
            deviations = {} if linear.outer else extra_deviations(rung)
        if config.rehearsal.twins and not interrupted:
            noise = 1.0 if config.errors.trust else finest.noise
            rehearsal = yield from rehearse_profile(profile, config, grids, linear, noise)
        if config.sensitivity.vary and not interrupted:
            sensitivity = yield from vary(
                linear(repeated), repeated, method, logarithmic=config.kind.logarithmic
            )
        if not interrupted:
            moved_by_start = yield from start_dependence(linear, rung)
    except KeyboardInterrupt:
        interrupted = True

    measurement = linear.measured(finest.grid)
    choices = tuple(_choice(top, name) for name in method.rules)
    chosen = next(choice for choice in choices if choice.rule == method.choose)
    raise_ = partial(prolong, coarse=rung.grid, fine=finest.grid)
    solution = finest.run.solution(chosen_stop)
    units = {extra.name: extra.units for extra in finest.measurement.extras}
    extras = {
        name: Found(values, units[name], deviations.get(name))
        for name, values in finest.standard.extras(solution).items()
    }
    predicted = linear.stated(finest.grid).data - finest.run.residual(chosen_stop) * finest.measurement.errors
    remarks = _broken_off(top, len(grids), interrupted) + remark(finest, weights, config)
    remarks += () if rehearsal is None else rehearsal.remarks
    result = Result(
        property=config.kind.ground_property,
        axes=finest.grid.axes,
        background=finest.standard.background.reshape(finest.grid.shape),
        model=top.model,
        mesh_change=top.mesh_change,
        anomaly=top.anomaly,
        coverage=profile.scene.coverage(finest.grid, method.correlation),
        predicted=predicted,
        observed=measurement.data,
        errors=measurement.errors,
        groupings=measurement.groupings,
        history=finest.run.history,
        options=finest.options,
        choices=choices,
        chosen=chosen,
        snapshots=tuple(_snapshots(top)),
        ladder=top.ladder,
        weights=weights,
        noise=finest.noise,
        extras=extras,
        noise_part=raise_(scatter),
        rehearsal=_raised_rehearsal(rehearsal, raise_),
        sensitivity=_raised_sensitivity(sensitivity, raise_),
        remarks=remarks,
        interrupted=interrupted,
        averages={
            name: Average(
                float(weights @ top.model.reshape(-1)),
                average_scatter.get(name, np.nan),
                None if rehearsal is None else rehearsal.average_errors[name],
            )
            for name, weights in averages(finest.grid).items()
        },
        start_dependence=moved_by_start,
    )
    if isinstance(measurement, NonlinearMeasurement):
        result = recomputed(result, measurement, linear, finest, profile, config)
    if config.kind.logarithmic:
        result = out_of_the_logarithm(result, finest.grid, averages(finest.grid))
    return result


def plan_method(config: Config) -> Method:
    """How a configuration asks to reconstruct."""
    given = config.ground.bounds
    bounds = None
    if given is not None:
        least, most = min(given), max(given)
        bounds = (float(np.log(least)), float(np.log(most))) if config.kind.logarithmic else (least, most)
    return Method(
        correlation=correlation(config),
        smoothness=config.ground.smoothness,
        solver=partial(plugins.solver(config.solver.method), **config.solver.options),
        iterations=config.solver.iterations,
        rules={name: plugins.rule(name) for name in config.stopping.judged},
        choose=config.stopping.choose,
        options=RuleOptions(tau=config.stopping.tau, gcv_factor=config.stopping.gcv_factor),
        background=in_unknown(config.ground.background, config),
        bounds=bounds,
        trust=config.errors.trust,
    )


def repeated_rung(grids: Sequence[Grid]) -> int:
    """Index of the rung for repeated work: the finest of few nodes, but not the finest of all."""
    few = [i for i, grid in enumerate(grids[:-1]) if grid.n_nodes <= _REPEATED_NODES]
    return few[-1] if few else 0


def two_rungs(grids: Sequence[Grid]) -> tuple[Grid, Grid]:
    """The rung for repeated work and the next finer one, for data that owe nothing to the first.

    Raises
    ------
    ConfigError
        With a single rung.
    """
    if len(grids) < 2:
        raise ConfigError("refinement.levels: a rehearsal takes its data from a finer grid; take 2 or more")
    i = repeated_rung(grids)
    return grids[i], grids[i + 1]


def rehearse_profile(
    profile: Profile, config: Config, grids: Sequence[Grid], linear: Linear, noise: float
) -> Generator[Progress, None, Rehearsal]:
    """All rules on twins of a profile; data come from the next finer rung than they are judged on.

    ``noise`` is the size of the errors over what is stated.
    """
    coarse, fine = two_rungs(grids)
    method = plan_method(config)
    described = _described(profile, config, linear, coarse, fine)
    found = yield from rehearse(
        (coarse, linear(coarse)),
        (fine, linear(fine)),
        method,
        twins=config.rehearsal.twins,
        seed=config.rehearsal.seed,
        noise=noise,
        described=None if isinstance(described, str) else described,
        averages=profile.scene.averages,
    )
    return replace(found, remarks=(described,)) if isinstance(described, str) else found


def _described(
    profile: Profile, config: Config, linear: Linear, coarse: Grid, fine: Grid
) -> tuple[Array, Array] | str | None:
    """The ground of ``[simulate]`` on the fine grid and its data, both less what the prior mean is and gives.

    Of a nonlinear measurement data are its own, seen from the linearisation at the survey's answer. That
    reaches no other ground than the survey's: what is described must explain its data nearly to the errors,
    else it is told in words why it is left out.
    """
    if config.simulate is None:
        return None
    ground = described_ground(config.simulate, config.kind.axes)
    points = np.stack(np.meshgrid(*fine.axes, indexing="ij"), axis=-1).reshape(-1, len(fine.axes))
    values = ground.values(points)
    measured = linear.measured(coarse)
    if isinstance(measured, Measurement):
        return values - ground.background, linear(fine).operator.matvec(values - ground.background)
    data = profile.scene.predict(ground)
    left = (measured.data - data) / weighted_errors(measured.errors, linear.weights)
    misfit = float(left @ left) / left.size
    if misfit > _TRUSTED:
        return (
            "the ground of [simulate] takes no part in the rehearsal: its data have a misfit of "
            f"{misfit:.3g} to the survey's, and the rehearsal reaches no ground with more than "
            f"{_TRUSTED:g}; describe one that explains the survey"
        )
    at_answer, mean = linear(coarse), linear(fine).background
    assert at_answer.background is not None
    assert mean is not None
    seen = data - measured.data + at_answer.data - at_answer.operator.matvec(at_answer.background)
    return (np.log(values) if config.kind.logarithmic else values) - mean, seen


def _broken_off(top: Climb, n_rungs: int, interrupted: bool) -> tuple[str, ...]:
    if not interrupted:
        return ()
    if len(top.rungs) == n_rungs and not top.finest.run.interrupted:
        return (
            "interrupted after the ladder: error bars, rehearsal, sensitivity or other starts are missing",
        )
    spacing = max(top.finest.grid.spacing)
    return (
        f"interrupted on the grid of {spacing:g} m after {top.finest.run.history.last} iterations: "
        f"this is judged, finer grids are missing",
    )


def _choice(top: Climb, rule: str) -> Choice:
    finest, grid = top.finest, top.finest.grid
    stop = finest.stop(rule)
    residual = finest.run.residual(stop)
    model = finest.model(stop)
    size = top.anomaly * float(np.sqrt(np.prod(grid.lengths)))
    return Choice(
        rule=rule,
        pick=finest.picks[rule],
        iteration=stop,
        chi_square=float(residual @ residual) / residual.size,
        roughness=float(norm(finest.run.solution(stop)[:, None])[0]),
        distance=grid.norm(model - top.model) / size if size > 0 else None,
        model=model,
    )


def _snapshots(top: Climb) -> Iterator[tuple[int, Array]]:
    kept = len(top.finest.run.solutions)
    stride = int(np.ceil(kept * top.finest.grid.n_nodes / SNAPSHOT_VALUES))
    for iteration in range(0, kept, max(stride, 1)):
        yield iteration, top.finest.model(iteration)


def _raised_rehearsal(rehearsal: Rehearsal | None, raised: Callable[[Array], Array]) -> Rehearsal | None:
    if rehearsal is None:
        return None
    return replace(
        rehearsal,
        total_error=raised(rehearsal.total_error),
        resolved=raised(rehearsal.resolved),
    )


def _raised_sensitivity(
    sensitivity: Sensitivity | None, raised: Callable[[Array], Array]
) -> Sensitivity | None:
    if sensitivity is None:
        return None
    return replace(
        sensitivity,
        spread=raised(sensitivity.spread),
        investigation=raised(sensitivity.investigation),
    )
