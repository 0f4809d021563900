"""Makes a survey over a described ground: no grid of the reconstruction takes part."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import xarray as xr

from stillground.config import Config
from stillground.config.settings import SimulateSettings
from stillground.errors import ConfigError, OutputError
from stillground.ground import Blob, Body, Box, Disc, Ground, Layer
from stillground.pipeline.profiles import checked
from stillground.survey import column, profiles, read, require_file, write_table
from stillground.survey.columns import error_of


def described_ground(settings: SimulateSettings, axes: tuple[str, ...]) -> Ground:
    """The ground that ``[simulate]`` describes: bodies add up, each as if it were alone."""
    base = settings.background
    bodies: list[Body] = []
    for layer in settings.layer:
        bottom = -np.inf if layer.bottom is None else layer.bottom
        top = np.inf if layer.top is None else layer.top
        bodies.append(Layer(layer.value - base, bottom, top, layer.dip))
    for box in settings.box:
        bodies.append(Box(box.value - base, box.lower.place, box.upper.place))
    for shape, given in ((Blob, settings.blob), (Disc, settings.disc)):
        bodies += [shape(body.value - base, body.centre.place, body.radii.along(axes)) for body in given]
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
    kind = config.kind
    planned = _planned(config, settings)
    ground = described_ground(settings, kind.axes)
    data = np.empty(planned.sizes["datum"])
    numbered = planned.assign_coords(datum=np.arange(data.size))
    for line in profiles(numbered, "simulate").values():
        data[line["datum"]] = kind.place(line, config.physics).predict(ground)

    random = np.random.default_rng(settings.seed)
    spread = np.hypot(settings.noise or 0.0, settings.relative_noise * np.abs(data))
    noisy = data + spread * random.standard_normal(data.size)
    kept = np.sort(random.permutation(data.size)[: round(data.size * (1 - settings.lost))])
    if column(kind.datum).rule == "positive" and (noisy[kept] <= 0).any():
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
    """Positions of a planned survey, or those of the survey's table."""
    kind = config.kind
    planned = kind.plan(settings)
    if planned is not None:
        rows = np.arange(1, planned.sizes["datum"] + 1)
        return planned.assign_coords(row=("datum", rows)).assign_attrs(source="simulate")
    if len(config.survey.files) != 1:
        places = " and ".join(kind.Plan.model_fields)
        raise ConfigError(f"simulate: give {places}, or one table in survey.files to take places from")
    path = config.survey.files[0]
    require_file(path, "survey.files")
    table = read(path, columns=config.survey.columns, units=config.survey.units, expected=kind.columns)
    usable, _ = checked(table, config)
    return usable.drop_vars([kind.datum, error_of(kind.datum)])
