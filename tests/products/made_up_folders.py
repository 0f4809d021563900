"""Made-up result folders of Osmere Weir (invented), written by the products themselves."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import numpy as np
from pyproj import CRS

from stillground.products.fit import fit_table, write_fit
from stillground.products.history import history_dataset, write_history
from stillground.products.ladder import ladder_dataset, write_ladder
from stillground.products.picture import picture_dataset, product, write_picture
from stillground.products.provenance import Provenance
from stillground.products.summary import profile_summary, run_summary, write_summary
from stillground.protocols import Array, Differences, Result, RuleOptions, Rung

from .made_up_results import fit_places

# The surface of a column, and what practice would read off its data.
GROUND = (np.zeros(1), np.array([62.0]))
USUAL = Differences(
    "mean between stations", np.array([40.0, 50.0]), np.array([50.0, 60.0]), 1 / np.array([2100.0, 1800.0])
)
TITLE = "Osmere Weir, left abutment (invented)"


def write_folder(
    folder: Path,
    results: Mapping[str, Result],
    *,
    title: str = TITLE,
    surface: Any = None,
    command: str = "stillground run osmere-weir.toml",
    shift: float = 0.0,
    north: bool = False,
    differences: Differences | None = None,
    config_text: str = 'title = "Osmere Weir"\n',
) -> Path:
    """The products of a run over some profiles; ``shift`` moves the trace east, m; ``north`` turns it."""
    origin = Provenance(
        title=title,
        config_text=config_text,
        command=command,
        inputs={"crosshole-ab.csv": "3f2a" * 16},
        versions={"stillground": "0.1.0", "numpy": "2.0.0"},
        created=datetime(2026, 12, 1, 5, 10, tzinfo=UTC),
        cautions="",
    )
    entries = []
    for name, result in results.items():
        common: dict[str, Any] = {"surface": surface, "provenance": origin}
        column = len(result.axes) == 1
        along = np.zeros(1) if column else result.axes[0]
        picture = picture_dataset(
            name,
            result,
            easting=431250 + shift + (0 if north else along) + np.zeros(along.size),
            northing=5312480.0 + (along if north else 0) + np.zeros(along.size),
            crs=CRS("EPSG:32631"),
            tolerance=0.02,
            differences=differences,
            **common,
        )
        places = {"axes": ("elevation",), "positions": {}} if column else fit_places()
        fit = fit_table(result, rows=np.arange(2, 627), datum="time", unit="ms", si_factor=1e-3, **places)
        files = {
            "ladder": write_ladder(folder, name, ladder_dataset(name, result, tolerance=0.02, **common)),
            "fit": write_fit(folder, name, fit),
            product(len(result.axes)): write_picture(folder, name, picture),
            "history": write_history(
                folder, name, history_dataset(name, result, options=RuleOptions(), **common)
            ),
        }
        entries.append(profile_summary(name, result, {key: path.name for key, path in files.items()}))
    write_summary(folder, run_summary(title, "0.1.0", None, entries))
    return folder


def stretched(result: Result, times: float) -> Result:
    """The same picture, ``times`` as long: a flat section."""

    def longer(axes: tuple[Array, ...]) -> tuple[Array, ...]:
        return (axes[0] * times, axes[1])

    rungs = tuple(Rung(r.spacing, longer(r.axes), r.model, r.iteration) for r in result.ladder.rungs)
    return replace(result, axes=longer(result.axes), ladder=replace(result.ladder, rungs=rungs))


def column_of(result: Result, at: int) -> Result:
    """One line of nodes of a section as a column, its data without groupings."""
    assert result.rehearsal is not None
    assert result.sensitivity is not None
    rehearsal = replace(
        result.rehearsal,
        total_error=result.rehearsal.total_error[at],
        resolved=result.rehearsal.resolved[at],
    )
    sensitivity = replace(
        result.sensitivity,
        spread=result.sensitivity.spread[at],
        investigation=result.sensitivity.investigation[at],
    )
    rungs = tuple(Rung(r.spacing[1:], r.axes[1:], r.model[3], r.iteration) for r in result.ladder.rungs)
    return replace(
        result,
        axes=result.axes[1:],
        model=result.model[at],
        background=result.background[at],
        mesh_change=result.mesh_change[at],
        noise_part=result.noise_part[at],
        coverage=replace(result.coverage, values=result.coverage.values[at]),
        groupings={},
        choices=tuple(replace(choice, model=choice.model[at]) for choice in result.choices),
        snapshots=tuple((k, model[at]) for k, model in result.snapshots),
        ladder=replace(result.ladder, rungs=rungs),
        rehearsal=rehearsal,
        sensitivity=sensitivity,
    )
