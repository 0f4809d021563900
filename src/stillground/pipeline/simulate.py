"""Makes a survey over a described ground, from closed forms: no grid takes part."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import xarray as xr

from stillground import plugins
from stillground.config import Config
from stillground.config.settings import PlacesSettings, SimulateSettings
from stillground.errors import ConfigError, OutputError
from stillground.ground import Blob, Body, Box, Disc, Ground, Layer
from stillground.pipeline.profiles import checked
from stillground.protocols import Array
from stillground.survey import read, write_table


def described_ground(settings: SimulateSettings, axes: tuple[str, ...]) -> Ground:
    """The ground that ``[simulate]`` describes: bodies add up, each as if it were alone."""
    base = settings.background
    bodies: list[Body] = []
    for layer in settings.layer:
        bottom = -np.inf if layer.bottom is None else layer.bottom
        top = np.inf if layer.top is None else layer.top
        bodies.append(Layer(layer.value - base, bottom, top, layer.dip))
    for box in settings.box:
        lower, upper = ((p.distance, p.elevation) for p in (box.lower, box.upper))
        bodies.append(Box(box.value - base, lower, upper))
    for shape, given in ((Blob, settings.blob), (Disc, settings.disc)):
        bodies += [
            shape(body.value - base, (body.centre.distance, body.centre.elevation), body.radii.along(axes))
            for body in given
        ]
    return Ground(base, tuple(bodies))


def simulate(config: Config, *, replace: bool = False) -> tuple[Path, int]:
    """Computes the data of a survey over a described ground and writes its table.

    Returns
    -------
    path : Path
    n_data : int

    Raises
    ------
    ConfigError
        Without ``[simulate]``, or when the ground has no closed form for the kind.
    OutputError
        When the table exists and ``replace`` is false.
    """
    settings = config.simulate
    if settings is None:
        raise ConfigError(
            "the configuration has no table [simulate]; add one with output, background and bodies"
        )
    if settings.output.exists() and not replace:
        raise OutputError(
            f"{settings.output} exists; simulate.output names the table to write: give another, or --replace"
        )
    kind = plugins.kind(config.survey.kind)
    planned = _planned(config, settings)
    scene = kind.place(planned, config.physics)
    data = scene.predict(described_ground(settings, kind.axes))

    random = np.random.default_rng(settings.seed)
    spread = np.hypot(settings.noise or 0.0, settings.relative_noise * data)
    noisy = data + spread * random.standard_normal(data.size)
    kept = np.sort(random.permutation(data.size)[: round(data.size * (1 - settings.lost))])
    if (noisy[kept] <= 0).any():
        raise ConfigError("simulate.noise: so large that data turn negative; take a smaller one")
    table = planned.assign({kind.datum: ("datum", noisy)}).isel(datum=kept)
    write_table(
        settings.output,
        table,
        [
            config.title,
            f"Invented: computed by 'stillground simulate' over a described ground, seed {settings.seed}.",
        ],
    )
    return settings.output, int(kept.size)


def _planned(config: Config, settings: SimulateSettings) -> xr.Dataset:
    """Positions of the survey, every source with every receiver, or those of the survey's tables."""
    kind = plugins.kind(config.survey.kind)
    if settings.sources is None or settings.receivers is None:
        if len(config.survey.files) != 1:
            raise ConfigError(
                "simulate: give sources and receivers, or one table in survey.files to take places from"
            )
        path = config.survey.files[0]
        table = read(path, columns=config.survey.columns, units=config.survey.units, expected=kind.columns)
        usable, _ = checked(table, config)
        return usable.drop_vars([kind.datum, f"{kind.datum}_error"])
    here, there = _places(settings.sources), _places(settings.receivers)
    pairs = {
        "source": np.repeat(here, len(there), axis=0),
        "receiver": np.tile(there, (len(here), 1)),
    }
    variables = {
        f"{end}_{axis}": ("datum", places[:, i])
        for end, places in pairs.items()
        for i, axis in enumerate("xyz")
    }
    rows = np.arange(1, len(pairs["source"]) + 1)
    return xr.Dataset(variables, coords={"row": ("datum", rows)}, attrs={"source": "simulate"})


def _places(line: PlacesSettings) -> Array:
    first, last = np.array(line.first), np.array(line.last)
    # Tables hold millimetres: the data are computed for the places that the table will name.
    return np.asarray(np.round(first + np.linspace(0, 1, line.count)[:, None] * (last - first), 3))
