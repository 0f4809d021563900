"""Made-up results of a crosshole survey at Osmere Weir (invented): smooth analytic fields, no solver."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
from scipy.ndimage import gaussian_filter

from stillground.protocols import (
    Choice,
    Field,
    Found,
    GridIndex,
    GroundProperty,
    History,
    Ladder,
    OuterSteps,
    Pattern,
    Pick,
    Rehearsal,
    Result,
    RuleOptions,
    Rung,
    Sensitivity,
    Variation,
    Verdict,
)

SLOWNESS = GroundProperty("slowness", "s m-1", "slowness", ("velocity", "m s-1", "velocity"))
WIDTH, TOP, BOTTOM = 18.0, 62.0, 36.0
SURFACE = (np.array([-1.0, 6.0, 19.0]), np.array([62.4, 63.1, 62.2]))


def axes_of(spacing: float) -> tuple[np.ndarray, np.ndarray]:
    return (
        -2 + spacing * np.arange(round(22 / spacing) + 1),
        34 + spacing * np.arange(round(30 / spacing) + 1),
    )


def slowness(distance: np.ndarray, elevation: np.ndarray, sharpness: float = 1.0) -> np.ndarray:
    """A velocity that grows with depth, a fast lens and a slow pocket."""
    velocity = 1500 + 32 * (TOP - elevation) + 40 * np.sin(distance / 5 + elevation / 3)
    for x, z, rx, rz, by in ((5.5, 53.0, 3.5, 2.0, 420.0), (12.5, 44.5, 2.5, 3.0, -380.0)):
        velocity = velocity + sharpness * by * np.exp(
            -(((distance - x) / rx) ** 2) - ((elevation - z) / rz) ** 2
        )
    return np.asarray(1 / velocity)


def positions() -> tuple[np.ndarray, np.ndarray]:
    """Sources and receivers as (distance, elevation), each of shape (25, 2)."""
    heights = np.linspace(TOP - 1, BOTTOM + 1, 25)
    return (
        np.column_stack([np.zeros(25), heights]),
        np.column_stack([np.full(25, WIDTH), heights]),
    )


def fit_places() -> dict[str, Any]:
    """What `fit_table` asks of a kind beside the result."""
    sources, receivers = positions()
    return {"axes": ("distance", "elevation"), "positions": {"source": sources, "receiver": receivers}}


def make_rehearsal(x: np.ndarray) -> Rehearsal:
    """Twenty twins in two families; layers cost about three times as much as draws from the prior."""
    scatter = np.sort(np.random.default_rng(11).exponential(size=20))
    cost = {
        "gcv": 0.12,
        "discrepancy": 0.13,
        "risk": 0.14,
        "whiteness": 0.14,
        "monotone-error": 0.14,
        "quasi-optimality": 0.3,
        "l-curve": 0.6,
        "hanke-raus": 1.1,
    }
    ratios = {
        family: {rule: 1 + share * size * scatter for rule, size in cost.items()}
        for family, share in (("prior", 0.3), ("layers", 1.0))
    }
    groups = (tuple(cost)[:5], *((rule,) for rule in tuple(cost)[5:]))
    inwards = 1 - np.abs(x - 9) / 11
    return Rehearsal(
        ratios=ratios,
        cost=cost,
        groups=groups,
        left_out={},
        total_error=2e-5 * (1.2 - inwards),
        resolved=0.2 + 0.7 * inwards,
    )


def make_sensitivity(x: np.ndarray) -> Sensitivity:
    return Sensitivity(
        variations=(
            Variation("lengths halved", 7.3, 0.39),
            Variation("lengths doubled", 13.2, 0.21),
            Variation("background less 10 %", 11.0, 0.35),
        ),
        spread=5e-6 + 1e-6 * np.abs(x - 9),
        investigation=np.abs(x - 9) / 22,
    )


def make_outer_steps() -> OuterSteps:
    return OuterSteps(
        misfits=(36.0, 9.4, 1.3, 1.02),
        targets=(9.0, 2.25, 1.0),
        inner=(np.array([36.0, 14.0, 9.0]), np.array([9.4, 4.0, 2.5, 2.25]), np.array([1.3, 1.0])),
        reached=True,
    )


def make_patterns(axes: tuple[np.ndarray, ...]) -> tuple[Pattern, ...]:
    """Of 2 and 4 m: small bodies come back left of 9 m and above 37 m, large ones above 40 m."""
    x, z = np.meshgrid(*axes, indexing="ij")
    found = []
    for size, share in ((4.0, 0.9 * (z > 40)), (2.0, 0.8 * (x < 9) * (z > 37))):
        for name in ("checkerboard", "bodies"):
            truth = np.sin(np.pi * x / size) * np.sin(np.pi * z / size)
            found.append(Pattern(name, size, truth, share * truth, share))
    return tuple(found)


def make_result(
    *,
    word: str = "settled",
    probed: bool = True,
    levels: int = 4,
    spacing: float = 0.25,
    n_rules: int = 8,
    argued: bool = True,
) -> Result:
    """``argued``: with a rehearsal and with settings varied."""
    axes = axes_of(spacing)
    x, z = np.meshgrid(*axes, indexing="ij")
    model = slowness(x, z)

    sources, receivers = positions()
    i, j = (index.ravel() for index in np.indices((25, 25)))
    t = (np.arange(240) + 0.5) / 240
    points = sources[i][:, None] * (1 - t[:, None]) + receivers[j][:, None] * t[:, None]
    lengths = np.hypot(*(receivers[j] - sources[i]).T)
    edges = [np.append(axis - spacing / 2, axis[-1] + spacing / 2) for axis in axes]
    density, _, _ = np.histogram2d(
        points[..., 0].ravel(), points[..., 1].ravel(), edges, weights=np.repeat(lengths / 240, 240)
    )
    density = gaussian_filter(density / spacing**2, 0.6 / spacing)

    errors = np.full(625, 1e-4)
    noise = np.random.default_rng(7).normal(size=625)
    observed = slowness(points[..., 0], points[..., 1]).mean(1) * lengths + noise * errors
    residual = 0.97 * noise + 0.6 * (i == 11)

    k = np.arange(31.0)
    chi_square = 0.9 + 40 * np.exp(-k / 1.6) + 1.2 * np.exp(-k / 9) - 0.009 * k
    roughness = 24 * (1 - np.exp(-k / 6)) + 0.35 * k
    history = History(
        n_data=625,
        residual_norm=np.sqrt(625 * chi_square),
        residual_step=np.abs(np.diff(np.sqrt(625 * chi_square), prepend=np.sqrt(625 * chi_square[0]))),
        solution_norm=roughness,
        step_norm=np.diff(roughness, prepend=0),
        gradient_norm=900 * np.exp(-k / 4),
        degrees_of_freedom=420 * (1 - np.exp(-k / 14)) if probed else None,
        error_bound=np.append(np.inf, 60 * np.exp(-k[1:] / 11)),
        whiteness={"source": 0.5 + np.abs(k - 9) / 4, "receiver": 0.6 + np.abs(k - 12) / 4},
    )

    def choice(rule: str, iteration: float | None, firm: bool, reason: str) -> Choice:
        at = 30.0 if iteration is None else iteration
        sharpness = 1 - np.exp(-at / 4)
        picture = slowness(x, z, sharpness)
        return Choice(
            rule=rule,
            pick=Pick(iteration, firm, reason),
            iteration=at,
            chi_square=float(np.interp(at, k, chi_square)),
            roughness=float(np.interp(at, k, roughness)),
            distance=abs(float(np.exp(-at / 4) - np.exp(-9 / 4))),
            model=picture,
        )

    choices = (
        choice("discrepancy", 13.4, True, "the misfit meets its target between iterations 13 and 14"),
        choice("gcv", 9.0, True, "a clear minimum at iteration 9"),
        choice("risk", 9.0, True, "a clear minimum at iteration 9"),
        choice("whiteness", 11.0, True, "residuals pass as white from iteration 11"),
        choice("l-curve", 6.0, False, "the corner is blunt: curvature within 5 % over 6 iterations"),
        choice("quasi-optimality", 17.0, False, "a second minimum within 2 %"),
        choice("monotone-error", 10.2, True, "the error bound stops falling"),
        choice("hanke-raus", None, False, "no minimum within 30 iterations"),
    )[:n_rules]

    rungs, change = [], []
    for level in reversed(range(levels)):
        coarse = axes_of(spacing * 2**level)
        cx, cz = np.meshgrid(*coarse, indexing="ij")
        rungs.append(Rung((spacing * 2**level,) * 2, coarse, slowness(cx, cz, 1 - 0.1 * level), 9.0))
        if level < levels - 1:
            change.append({"settled": 0.031 / 4 ** (levels - 2 - level)}.get(word, 0.2 + 0.03 * level))
    reasons = {
        "settled": "halving the spacing from 0.5 m to 0.25 m changes the picture by 0.2 %, "
        "and the changes shrink at order 2.0",
        "drifting": "each halving of the spacing changes the picture by about as much as the one before",
        "undecided": "two rungs cannot tell an order: give refinement.levels 3 or more",
    }
    order = 2.0 if word == "settled" and levels > 2 else None
    verdict = Verdict(word, reasons[word], order, 0.00065 if order else None, 2.0)  # type: ignore[arg-type]
    index = GridIndex(None, None, None, None, None, "it oscillates from grid to grid")
    if order:
        index = GridIndex(0.0009, 1.9, 2.1e-5, 0.002, 0.0007, None)
    mesh_change = 1.2e-6 * (np.exp(-(((x - 12.5) / 2) ** 2) - ((z - 44.5) / 2) ** 2) + (np.abs(x - 9) > 10))

    return Result(
        property=SLOWNESS,
        axes=axes,
        background=np.full_like(model, 1 / 1900),
        model=model,
        mesh_change=mesh_change if levels > 1 else np.full_like(model, np.nan),
        anomaly=float(np.std(model)),
        coverage=Field("path_density", density, "m-1", "ray length per area"),
        predicted=observed - residual * errors,
        observed=observed,
        errors=errors,
        groupings={"source": i, "receiver": j},
        options=RuleOptions(),
        history=history,
        choices=choices,
        chosen=choices[1] if n_rules > 1 else choices[0],
        snapshots=tuple((n, slowness(x, z, 1 - np.exp(-n / 4))) for n in range(0, 31, 5)),
        ladder=Ladder(
            rungs=tuple(rungs),
            change=tuple(change),
            pick_drift=0.001 if levels > 1 else None,
            jitter=3e-13 if levels > 2 else None,
            verdict=verdict,
            index=index,
            notes=() if order else ("made-up note",),
        ),
        weights=np.where(np.isin(np.arange(625), (17, 300)), 0.25, 1.0),
        noise=1.07,
        extras={
            "source_static": Found(1e-4 * np.sin(np.arange(25.0)), "s"),
            "delay": Found(np.array([3e-4]), "s", 2e-4),
        },
        noise_part=4e-6 + 1e-7 * np.abs(x - 9),
        rehearsal=make_rehearsal(x) if argued else None,
        sensitivity=make_sensitivity(x) if argued else None,
        remarks=("2 of 625 data look like outliers",),
    )


def bent_rays() -> tuple[np.ndarray, ...]:
    """Of each datum a parabola that sags by 2 m, of 100 corners; the third is lost."""
    sources, receivers = positions()
    t = np.linspace(0, 1, 100)[:, None]
    ways = [a * (1 - t) + b * t - 8 * t * (1 - t) * [0, 1] for a in sources for b in receivers]
    return tuple(way if i != 2 else np.empty((0, 2)) for i, way in enumerate(ways))


def bent(result: Result, recomputed: float = 1.27) -> Result:
    """The same answer as that of a nonlinear measurement whose rays bend with the ground."""
    chosen = replace(result.chosen, chi_square_recomputed=recomputed)
    choices = tuple(chosen if choice is result.chosen else choice for choice in result.choices)
    moved = {"a quarter slower": 0.148, "half as steep": 2.06}
    return replace(result, rays=bent_rays(), chosen=chosen, choices=choices, start_dependence=moved)
