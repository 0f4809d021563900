"""What the data say of the settings once the answer is there, each with what to do."""

from __future__ import annotations

import numpy as np

from stillground.config import Config
from stillground.percent import percent
from stillground.protocols import Array, Choice, Ladder, RuleOptions
from stillground.reconstruct import Linearised, Reconstruction, shared_constants
from stillground.stopping.gcv import gcv

_MISSTATED = 1.3
_ROUNDING = 1e-6
_STATICS, _WARY = 2.5, 1.4
_STALLED = 0.01
_NOT_LINEAR = 1.2
_STEADIER = 0.6


def remark(finest: Reconstruction, weights: Array, config: Config) -> tuple[str, ...]:
    """Sentences on the size of the errors, outliers, statics, bounds and signs; empty where all is well."""
    said = _impossible(finest, config)
    noise = finest.noise
    if noise < _ROUNDING:
        return (
            *said,
            "the data are fitted to rounding: they carry no noise, and rules have nothing to judge",
        )
    history = finest.run.history
    contradicted = False
    if config.ground.bounds is not None:
        norms = history.residual_norm
        stalled = norms[-1] > (1 - _STALLED) * norms[history.last // 2]
        # The size that cross-validation finds comes from this very residual: only the stated one can tell.
        contradicted = bool(stalled and config.errors.trust and history.chi_square[-1] > 1.1)
    if contradicted:
        said.append("the residual stalls above the errors: the bounds contradict the data")
    if not 1 / _MISSTATED < noise < _MISSTATED:
        what = "too small" if noise > 1 else "too large"
        trusted = "" if not config.errors.trust else ", or set errors.trust = false"
        said.append(
            f"the errors look {what}: cross-validation finds {noise:.2g} times what is stated; "
            f"look at them again{trusted}"
        )
    light = int(np.sum(weights < 0.5))
    if light:
        said.append(
            f"{light} of {weights.size} data look like outliers and count less than half (column weight of "
            f'the fit table); look at these picks, or set errors.outliers = "off"'
        )
    # Statics draw the plain pick so late that the ground has taken them up; a wary one leaves them. Before
    # there is a pick, residuals are alike for want of iterations.
    wary = gcv(history, RuleOptions(gcv_factor=_WARY)).iteration
    shared = {}
    if wary is not None and wary < history.last and not contradicted:
        kept = weights > 0.5
        groups = {
            name: np.unique(group[kept], return_inverse=True)[1]
            for name, group in finest.measurement.groupings.items()
        }
        shared = shared_constants(finest.run.residual(wary)[kept], groups)
    missing = [name for name, size in shared.items() if size > _STATICS and name not in config.errors.statics]
    if missing:
        named = " and ".join(f"{name} ({shared[name]:.2g}, expected 1)" for name in missing)
        setting = ", ".join(f"{name} = 1.0" for name in missing)
        said.append(
            f"residuals are alike within each {named}: constants are likely; "
            f"set errors.statics = {{ {setting} }}"
        )
    return tuple(said)


def remark_nonlinear(
    outer: Linearised,
    causes: tuple[str, ...],
    chosen: Choice,
    ladder: Ladder,
    moved: float | None,
    config: Config,
) -> tuple[str, ...]:
    """Sentences on how far the last linearisation of a nonlinear measurement is to be trusted.

    ``causes`` are those found of a target that was not reached, see `unreached.why_unreached`; ``moved``
    is how far the outer steps' own model did since the grid before, see `Linear.moved`.
    """
    asked = "; rules that ask for a misfit ask for no lower one" if config.errors.trust else ""
    said = [] if outer.steps.reached else [outer.reason + asked, *causes]
    recomputed = chosen.chi_square_recomputed
    if recomputed is not None and recomputed > _NOT_LINEAR * max(chosen.chi_square, 1.0):
        said.append(
            f"the misfit of the answer is {recomputed:.3g} where its last linearisation has "
            f"{chosen.chi_square:.3g}: the answer is farther off than that reaches; trust its details less"
        )
    restless = outer.steps.reached and ladder.verdict.word != "settled"
    if restless and moved is not None and moved < _STEADIER * ladder.change[-1]:
        said.append(
            f"the model that the outer steps came to moved only by {percent(moved)} from the grid before, "
            f"its linearisation more: arrivals that can go two ways almost equally fast change over; one "
            f"grid more may tell (a finer ground.spacing, refinement.levels one higher)"
        )
    resting = ["error bars"]
    resting += ["rehearsal"] if config.rehearsal.twins else []
    resting += ["sensitivity"] if config.sensitivity.vary else []
    named = " and ".join([", ".join(resting[:-1]), resting[-1]] if len(resting) > 1 else resting)
    said.append(
        f"{named} are those of the last linearisation: they do not know how far the data are not linear"
    )
    return tuple(said)


def _impossible(finest: Reconstruction, config: Config) -> list[str]:
    """What to say where a property that nature has only above zero came out below."""
    seen = config.kind.ground_property
    # The reconstruction of a logarithm is one of the logarithm, and its answer above zero.
    if not seen.positive or config.kind.logarithmic:
        return []
    below = finest.model(finest.stop(config.stopping.choose)).reshape(-1) < 0
    weights = finest.grid.weights()
    share = float(weights[below].sum() / weights.sum())
    if share == 0:
        return []
    return [
        f"{seen.name} is negative in {percent(share)} of the ground, which no ground has: check units, "
        f'orientations and heights of the data; then keep it above zero (solver.method = "kaczmarz" with '
        f"ground.bounds), or stop earlier (stopping.choose)"
    ]
