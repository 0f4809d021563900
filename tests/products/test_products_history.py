"""The history and the ladder say in files what the result says in memory."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import xarray as xr

from stillground.products.history import history_dataset, write_history
from stillground.products.ladder import ladder_dataset, write_ladder
from stillground.products.provenance import Provenance
from stillground.products.summary import profile_summary
from stillground.protocols import Field, Result, RuleOptions

from .made_up_results import make_outer_steps, slowness


def reread(path: Path) -> xr.Dataset:
    with xr.open_dataset(path, engine="netcdf4") as file:
        return file.load()


def written(result: Result, provenance: Provenance, folder: Path, surface: Any = None) -> xr.Dataset:
    made = history_dataset(
        "crosshole-ab", result, options=RuleOptions(), surface=surface, provenance=provenance
    )
    return reread(write_history(folder, "crosshole-ab", made))


def test_curves_are_the_historys(result: Result, provenance: Provenance, tmp_path: Path) -> None:
    file = written(result, provenance, tmp_path)
    assert file.iteration.values.tolist() == list(range(31))
    assert file.iteration.dtype == np.int32
    for name in (
        "residual_norm",
        "chi_square",
        "solution_norm",
        "step_norm",
        "gradient_norm",
        "degrees_of_freedom",
        "error_bound",
    ):
        np.testing.assert_allclose(file[name], getattr(result.history, name), rtol=1e-6)
    assert "roughness" in file.solution_norm.attrs["long_name"]


def test_whiteness_has_a_curve_for_each_grouping(
    result: Result, provenance: Provenance, tmp_path: Path
) -> None:
    file = written(result, provenance, tmp_path)
    for grouping in ("source", "receiver"):
        curve = file[f"whiteness_{grouping}"]
        np.testing.assert_allclose(curve, result.history.whiteness[grouping], rtol=1e-6)
        assert grouping in curve.attrs["long_name"]
        assert "1.36" in curve.attrs["long_name"]


def test_gcv_and_the_target_are_as_the_rules_took_them(result: Result, provenance: Provenance) -> None:
    options = RuleOptions(tau=1.2, gcv_factor=1.4, noise=2.0)
    made = history_dataset("ab", result, options=options, surface=None, provenance=provenance)
    # Golub, Heath and Wahba (1979), with the price of a degree of freedom.
    history = result.history
    expected = history.chi_square / (1 - 1.4 * history.degrees_of_freedom / history.n_data) ** 2
    np.testing.assert_allclose(made["gcv"], expected, rtol=1e-6)
    assert float(made["target_chi_square"]) == pytest.approx((1.2 * 2.0) ** 2)


def test_a_curve_that_the_method_lacks_is_left_out(
    make: Callable[..., Result], provenance: Provenance, tmp_path: Path
) -> None:
    file = written(make(probed=False, spacing=1.0), provenance, tmp_path)
    assert "degrees_of_freedom" not in file
    assert "filter_slope" not in file


def test_a_filter_slope_is_kept_where_there_is_one(
    result: Result, provenance: Provenance, tmp_path: Path
) -> None:
    slope = np.linspace(0, 3, 31)
    sloped = replace(result, history=replace(result.history, filter_slope=slope))
    np.testing.assert_allclose(written(sloped, provenance, tmp_path).filter_slope, slope, rtol=1e-6)


def test_noise_and_unknowns_beside_the_ground_are_kept(
    result: Result, provenance: Provenance, tmp_path: Path
) -> None:
    file = written(result, provenance, tmp_path)
    np.testing.assert_allclose(file.noise, 1.07, rtol=1e-6)
    assert file.source_static.dims == ("source_static_number",)
    np.testing.assert_allclose(file.source_static, result.extras["source_static"].values, rtol=1e-6)
    assert file.delay.dims == ()
    np.testing.assert_allclose(file.delay, 3e-4, rtol=1e-6)
    assert file.source_static.attrs["units"] == file.delay.attrs["units"] == "s"


def test_outer_steps_are_kept_with_their_inner_iterations(
    result: Result, provenance: Provenance, tmp_path: Path
) -> None:
    assert "outer_chi_square" not in written(result, provenance, tmp_path)
    steps = make_outer_steps()
    file = written(replace(result, outer_steps=steps), provenance, tmp_path)
    np.testing.assert_allclose(file.outer_chi_square, steps.misfits, rtol=1e-6)
    np.testing.assert_allclose(file.outer_target, [np.nan, *steps.targets])
    for number, curve in enumerate(steps.inner, start=1):
        np.testing.assert_allclose(file.inner_chi_square[file.inner_step == number], curve, rtol=1e-6)
    summary = profile_summary("ab", replace(result, outer_steps=steps), {})
    assert summary["outer_steps"]["inner_iterations"] == [2, 3, 1]


def test_every_rule_has_its_pick_and_its_picture(
    result: Result, provenance: Provenance, tmp_path: Path
) -> None:
    file = written(result, provenance, tmp_path)
    assert file.attrs["chosen_rule"] == "gcv"
    for choice in result.choices:
        one = file.sel(rule=choice.rule)
        picked = np.nan if choice.pick.iteration is None else choice.pick.iteration
        np.testing.assert_allclose(one.picked_iteration, picked, rtol=1e-6)
        np.testing.assert_allclose(one.shown_iteration, choice.iteration, rtol=1e-6)
        assert bool(one.firm) is choice.pick.firm
        assert one.reason.item() == choice.pick.reason
        value = one.slowness_at_pick.sel(distance=5.5, elevation=53.0)
        expected = slowness(np.array(5.5), np.array(53.0), 1 - np.exp(-choice.iteration / 4))
        np.testing.assert_allclose(value, expected, rtol=1e-6)
    assert np.isnan(file.picked_iteration.sel(rule="hanke-raus"))


def test_kept_iterations_keep_their_pictures(
    result: Result, provenance: Provenance, surface: Any, tmp_path: Path
) -> None:
    file = written(result, provenance, tmp_path, surface)
    assert file.kept_iteration.values.tolist() == [0, 5, 10, 15, 20, 25, 30]
    assert file.slowness_at_iteration.dims == ("kept_iteration", "elevation", "distance")
    assert file.slowness_at_iteration.encoding["chunksizes"] == (1, 121, 89)
    value = file.slowness_at_iteration.sel(kept_iteration=5, distance=12.5, elevation=44.5)
    np.testing.assert_allclose(value, slowness(np.array(12.5), np.array(44.5), 1 - np.exp(-5 / 4)), rtol=1e-6)
    assert file.slowness_at_iteration.sel(elevation=64.0).isnull().all()


def test_a_column_has_elevation_only(result: Result, provenance: Provenance) -> None:
    elevation = result.axes[1]
    column = replace(
        result,
        axes=(elevation,),
        model=result.model[3],
        choices=tuple(replace(choice, model=choice.model[3]) for choice in result.choices),
        snapshots=(),
        coverage=Field("path_density", result.coverage.values[3], "m-1", "ray length per area"),
    )
    made = history_dataset("column", column, options=RuleOptions(), surface=None, provenance=provenance)
    assert made.slowness_at_pick.dims == ("rule", "elevation")
    assert "slowness_at_iteration" not in made
    np.testing.assert_allclose(
        made.slowness_at_pick.sel(rule="gcv"), result.choices[1].model[3][::-1], rtol=1e-6
    )


def test_the_ladder_keeps_every_rung_on_its_own_nodes(
    result: Result, provenance: Provenance, surface: Any, tmp_path: Path
) -> None:
    made = ladder_dataset("crosshole-ab", result, surface=surface, tolerance=0.02, provenance=provenance)
    file = reread(write_ladder(tmp_path, "crosshole-ab", made))
    assert file.spacing.values.tolist() == [2.0, 1.0, 0.5, 0.25]
    assert file.nodes.values.tolist() == [12 * 16, 23 * 31, 45 * 61, 89 * 121]
    np.testing.assert_allclose(file.change, result.ladder.change, rtol=1e-6)
    for i, sharpness in enumerate((0.7, 0.8, 0.9, 1.0)):
        field = file[f"slowness_rung_{i}"]
        assert field.dims == (f"elevation_{i}", f"distance_{i}")
        value = field.sel({f"elevation_{i}": 46.0, f"distance_{i}": 12.0})
        np.testing.assert_allclose(value, slowness(np.array(12.0), np.array(46.0), sharpness), rtol=1e-6)
        assert field.isel({f"elevation_{i}": 0}).isnull().all()
    assert file.verdict.item() == "settled"
    assert file.verdict_reason.item() == result.ladder.verdict.reason
    assert float(file.order) == 2.0
    np.testing.assert_allclose(
        [file.remaining, file.pick_drift, file.tolerance], [0.00065, 0.001, 0.02], rtol=1e-6
    )
    np.testing.assert_allclose(
        [file.expected, file.jitter, file["index"], file.index_order, file.index_extrapolated],
        [2.0, 3e-13, 0.0009, 1.9, 2.1e-5],
        rtol=1e-6,
    )
    assert file.index_extrapolated.attrs["units"] == "s m-1"
    assert file.index_reason.item() == file.notes.item() == ""


def test_what_one_rung_cannot_tell_is_nan(
    make: Callable[..., Result], provenance: Provenance, tmp_path: Path
) -> None:
    alone = make(word="undecided", levels=1, spacing=1.0)
    made = ladder_dataset("crosshole-ab", alone, surface=None, tolerance=0.02, provenance=provenance)
    file = reread(write_ladder(tmp_path, "crosshole-ab", made))
    assert all(np.isnan(file[name]) for name in ("order", "remaining", "pick_drift", "jitter", "index"))
    assert file.index_reason.item() == "it oscillates from grid to grid"
    assert file.notes.item() == "made-up note"
    assert file.sizes["rung"] == 1
    assert file.change.size == 0
