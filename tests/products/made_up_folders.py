"""Made-up result folders of Osmere Weir (invented), written by the products themselves."""

from __future__ import annotations

import json
from collections.abc import Mapping
from dataclasses import replace
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import xarray as xr
from pyproj import CRS
from stillground.products.section import section_dataset, write_section

from stillground.products.fit import fit_table, write_fit
from stillground.products.history import history_dataset, write_history
from stillground.products.ladder import ladder_dataset, write_ladder
from stillground.products.netcdf import write_netcdf
from stillground.products.provenance import Provenance
from stillground.products.summary import profile_summary, run_summary, write_summary
from stillground.protocols import Array, Result, RuleOptions, Rung

from .made_up_results import fit_places

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
        along = result.axes[0]
        section = section_dataset(
            name,
            result,
            easting=431250 + shift + (0 if north else along) + np.zeros(along.size),
            northing=5312480.0 + (along if north else 0) + np.zeros(along.size),
            crs=CRS("EPSG:32631"),
            tolerance=0.02,
            **common,
        )
        fit = fit_table(
            result, rows=np.arange(2, 627), datum="time", unit="ms", si_factor=1e-3, **fit_places()
        )
        files = {
            "ladder": write_ladder(folder, name, ladder_dataset(name, result, tolerance=0.02, **common)),
            "fit": write_fit(folder, name, fit),
            "section": write_section(folder, name, section),
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


def write_column(folder: Path, result: Result, at: int) -> Path:
    """A folder of a column: one line of nodes of a section's files, on elevation alone, with no groupings.

    Written from a section's products, because the layout is the contract: the same variables over
    ``elevation``, the file under the key ``column``.
    """
    write_folder(folder, {"sounding": result})
    summary = json.loads((folder / "summary.json").read_text())
    files = summary["profiles"][0]["files"]
    n_rungs = len(result.ladder.rungs)
    for key in ("section", "history", "ladder"):
        with xr.open_dataset(folder / files[key], mask_and_scale=False) as file:
            held = file.load()
        where = {"distance": at} | {f"distance_{i}": 1 for i in range(n_rungs)}
        held = held.isel({dim: i for dim, i in where.items() if dim in held.dims}).reset_coords(drop=True)
        for variable in held.variables.values():
            fill = variable.attrs.pop("_FillValue", None)
            variable.encoding = {} if fill is None or variable.dtype.kind == "f" else {"_FillValue": fill}
        (folder / files[key]).unlink()
        if key == "section":
            files["column"] = files.pop("section").replace("section", "column")
            held = held.drop_vars(["trace_geometry", "trace_node_count", "trace_name"], errors="ignore")
        write_netcdf(held, folder / files["column" if key == "section" else key])
    fit = pd.read_csv(folder / files["fit"])
    fit[list(fit.columns[:5])].to_csv(folder / files["fit"], index=False)
    (folder / "summary.json").write_text(json.dumps(summary))
    return folder
