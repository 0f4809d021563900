"""A crosshole survey over a described ground, as arrays, with the truth beside it."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
import xarray as xr

from stillground import plugins
from stillground.grid import Grid, ladder
from stillground.ground import Blob, Ground
from stillground.physics.straight_ray import RayScene, StraightRay, StraightRaySettings
from stillground.progress import finish
from stillground.protocols import Array, Measurement, RuleOptions
from stillground.reconstruct import Method, Reconstruction, reconstruct

BACKGROUND = 1 / 1800
BLOBS = Ground(
    BACKGROUND,
    (
        Blob(0.15 * BACKGROUND, centre=(3.0, -4.0), radii=(1.2, 0.9)),
        Blob(-0.10 * BACKGROUND, centre=(6.0, -8.0), radii=(1.5, 1.0)),
    ),
)
RULES = ("gcv", "discrepancy", "risk", "whiteness", "l-curve", "quasi-optimality", "monotone-error",
         "hanke-raus")  # fmt: skip


@dataclass(frozen=True)
class Twin:
    """A survey whose ground is known, on one grid."""

    grid: Grid
    scene: RayScene
    measurement: Measurement
    truth: Array

    def error(self, model: Array) -> float:
        """L2 norm of model less truth."""
        return self.grid.norm(model - self.truth)

    def best(self, found: Reconstruction) -> float:
        """Error of the best iterate."""
        return min(self.error(found.model(k)) for k in range(found.run.history.last + 1))

    def disturbed(self, change: Callable[[Array], Array]) -> Twin:
        """The same survey with its data changed."""
        changed = replace(self.measurement, data=change(self.measurement.data))
        return replace(self, measurement=changed)


def survey(n: int = 16, noise: float = 0.02e-3, seed: int = 3, ground: Ground = BLOBS) -> xr.Dataset:
    """Times between boreholes 9 m apart from closed forms, with white noise, n sources and receivers."""
    depths = -np.linspace(0.5, 11.5, n)
    source, receiver = (g.ravel() for g in np.meshgrid(depths, depths, indexing="ij"))
    zeros = np.zeros(n * n)
    starts, ends = np.column_stack([zeros, source]), np.column_stack([zeros + 9.0, receiver])
    times = ground.line_integrals(starts, ends)
    times = times + noise * np.random.default_rng(seed).standard_normal(times.size)
    columns = {
        "source_x": zeros, "source_y": zeros, "source_z": source,
        "receiver_x": zeros + 9.0, "receiver_y": zeros, "receiver_z": receiver,
        "time": times, "time_error": zeros + noise,
    }  # fmt: skip
    return xr.Dataset(
        {name: ("datum", values) for name, values in columns.items()},
        coords={"row": ("datum", np.arange(1, n * n + 1))},
        attrs={"source": "twin.csv"},
    )


def crosshole_twin(
    n: int = 16,
    noise: float = 0.02e-3,
    seed: int = 3,
    ground: Ground = BLOBS,
    *,
    anisotropy: bool = False,
    spacing: float = 0.5,
) -> Twin:
    """The survey on a grid of half a metre."""
    settings = StraightRaySettings(anisotropy="fit" if anisotropy else "off")
    scene = StraightRay().place(survey(n, noise, seed, ground), settings)
    (grid,) = ladder((-1.5, -12.5), (10.5, 0.5), (spacing, spacing), 1)
    points = np.stack(np.meshgrid(*grid.axes, indexing="ij"), axis=-1).reshape(-1, 2)
    return Twin(grid, scene, scene.assemble(grid), ground.values(points).reshape(grid.shape))


def a_method(choose: str = "gcv", solver: str = "lsqr", iterations: int = 40, **changes: object) -> Method:
    """Default numbers and every rule."""
    method = Method(
        correlation=(3.0, 2.0),
        smoothness=2.0,
        solver=plugins.solver(solver),
        iterations=iterations,
        rules={name: plugins.rule(name) for name in RULES},
        choose=choose,
        options=RuleOptions(),
    )
    return replace(method, **changes)  # type: ignore[arg-type]


def reconstructed(twin: Twin, method: Method | None = None) -> Reconstruction:
    """The answer on the twin's grid."""
    return finish(reconstruct(twin.measurement, twin.grid, method or a_method()))
