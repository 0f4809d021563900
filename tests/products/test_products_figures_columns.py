"""Laws of the figures of columns: curves where values are, bands as wide as errors, fading where unsure."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import Any

import matplotlib as mpl
import numpy as np
import pandas as pd
import pytest
from matplotlib.axes import Axes
from matplotlib.figure import Figure

from stillground.products.averages import read_averages
from stillground.products.figures import figures, write_figures
from stillground.products.figures.column import BAND, STEPS, column_figure
from stillground.products.figures.errors import errors_figure
from stillground.products.figures.ladder import ladder_figure
from stillground.products.figures.pattern import pattern_figure
from stillground.products.figures.sensitivity import sensitivity_figure
from stillground.products.figures.sheet import TEAL
from stillground.products.figures.survey import survey_figure
from stillground.products.overlay import Overlay
from stillground.products.picture import picture_dataset
from stillground.protocols import Average, Differences, Field, Pattern, Result, RuleOptions

ELEVATION = 34 + 0.25 * np.arange(121)
SURFACE = (np.zeros(1), np.array([62.0]))
POSITIONS = {"source": np.array([[62.0]]), "receiver": np.arange(36.0, 62.0)[:, None]}
STEPPED = Differences("first differences", np.arange(36.0, 61.0), np.arange(37.0, 62.0), np.full(25, 5e-4))


@pytest.fixture(scope="module")
def column(result: Result) -> Result:
    """The made-up section's line at 9 m as a column; its lowest metre is hardly covered."""
    i = 44

    def line(field: Any) -> Any:
        return field[i].copy()

    rehearsal, sensitivity = result.rehearsal, result.sensitivity
    assert rehearsal is not None
    assert sensitivity is not None
    return replace(
        result,
        axes=(ELEVATION,),
        background=line(result.background),
        model=line(result.model),
        mesh_change=np.zeros(121),
        coverage=Field(
            "path_density", np.where(ELEVATION < 35.1, 0.01, 1.0), "1", "ray length per elevation"
        ),
        choices=tuple(replace(choice, model=line(choice.model)) for choice in result.choices),
        chosen=replace(result.chosen, model=line(result.chosen.model)),
        snapshots=(),
        ladder=replace(
            result.ladder,
            rungs=tuple(
                replace(rung, axes=rung.axes[1:], model=rung.model[rung.model.shape[0] // 2])
                for rung in result.ladder.rungs
            ),
        ),
        noise_part=line(result.noise_part),
        rehearsal=replace(
            rehearsal, total_error=line(rehearsal.total_error), resolved=line(rehearsal.resolved)
        ),
        sensitivity=replace(
            sensitivity, spread=line(sensitivity.spread), investigation=line(sensitivity.investigation)
        ),
        averages={"down to 10 m": Average(6e-4, 1e-6, 2e-6)},
    )  # fmt: skip


def drawn(column: Result, differences: Differences | None = STEPPED) -> Figure:
    return column_figure(
        "hole", column, tolerance=0.02, surface=SURFACE, positions=POSITIONS, differences=differences
    )


def curves(axes: Axes, colour: Any) -> list[np.ndarray]:
    wanted = mpl.colors.to_rgb(colour)
    plain = [line for line in axes.lines if line.get_marker() == "None"]
    return [line.get_xydata() for line in plain if mpl.colors.to_rgb(line.get_color()) == wanted]


@pytest.mark.parametrize("rehearsed", [True, False])
def test_the_band_is_as_wide_as_the_error_that_it_names(column: Result, rehearsed: bool) -> None:
    shown = column if rehearsed else replace(column, rehearsal=None)
    figure = drawn(shown)
    (axes,) = figure.axes
    assert column.rehearsal is not None
    error = (column.rehearsal.total_error if rehearsed else column.noise_part) / column.model**2
    (band,) = [c for c in axes.collections if mpl.colors.same_color(c.get_facecolor()[0], BAND)]
    outline = band.get_paths()[0].vertices
    for k in (20, 60, 100):
        across = np.unique(outline[np.isclose(outline[:, 1], ELEVATION[k]), 0])
        velocity = 1 / column.model[k]
        np.testing.assert_allclose(across, [velocity - error[k], velocity + error[k]], rtol=1e-6)
    words = " ".join(text.get_text() for text in axes.get_legend().get_texts())
    assert ("total error" in words) == rehearsed
    assert ("noise part" in words) == (not rehearsed)


def test_the_curve_is_the_velocity_and_pale_where_it_is_not_reliable(column: Result) -> None:
    (axes,) = drawn(column).axes
    (bold,) = curves(axes, TEAL)
    sure = ELEVATION >= 35.1
    sure &= ELEVATION <= 62.0
    np.testing.assert_allclose(bold[sure, 0], 1 / column.model[sure])
    assert np.isnan(bold[~sure, 0]).all()
    full = [line for line in axes.lines if line.get_xydata().shape == bold.shape]
    assert any(np.isfinite(line.get_xdata()).all() for line in full), "the pale one goes on"
    assert axes.get_ylim() == (34.0, 62.0), "up to the ground, not to the margin above it"


def test_differences_are_steps_and_those_without_a_velocity_are_left_out_and_told(column: Result) -> None:
    values = np.where(np.arange(25) == 7, -1e-4, 5e-4)
    (axes,) = drawn(column, replace(STEPPED, values=values)).axes
    (steps,) = curves(axes, STEPS)
    assert np.isnan(steps[14:16, 0]).all()
    assert np.nanmax(np.abs(steps[:, 0] - 2000)) < 1e-9
    words = " ".join(text.get_text() for text in axes.get_legend().get_texts())
    assert "1 not above zero left out" in words
    (axes,) = drawn(column, None).axes
    assert curves(axes, STEPS) == []


def test_positions_stand_on_the_left_edge_and_the_average_in_the_title(column: Result) -> None:
    figure = drawn(column)
    (axes,) = figure.axes
    (sources,) = [line for line in axes.lines if line.get_marker() == "*"]
    figure.draw_without_rendering()
    at = axes.transAxes.inverted().transform(sources.get_transform().transform(sources.get_xydata()))
    np.testing.assert_allclose(at, [[0, 1]], atol=1e-9)
    assert (
        "Average velocity down to 10 m: 1667 m\N{NO-BREAK SPACE}s⁻¹, ± 5.6 (total error)"
        in axes.get_title(loc="left")
    )


def test_averages_are_told_as_people_read_them(column: Result) -> None:
    # A small change of slowness ds changes velocity by ds over slowness squared.
    (read,) = read_averages(column)
    assert (read.of, read.units, read.value) == ("velocity", "m s-1", pytest.approx(1 / 6e-4))
    assert read.noise_part == pytest.approx(1e-6 / 6e-4**2)
    broken_off = replace(column, averages={"down to 10 m": Average(6e-4, np.nan, None)})
    assert read_averages(broken_off)[0].sentence == "average velocity down to 10 m: 1667 m s-1"


def test_errors_choices_and_rungs_are_curves_on_the_scales_of_maps(column: Result) -> None:
    assert column.rehearsal is not None
    panels = {axes.get_title(loc="left"): axes for axes in
              errors_figure("hole", column, tolerance=0.02, surface=SURFACE).axes}  # fmt: skip
    assert set(panels) == {"Noise part", "Total error", "Resolved fraction"}
    assert panels["Noise part"].get_xlim() == panels["Total error"].get_xlim()
    assert panels["Noise part"].get_xlim()[1] >= column.anomaly / np.median(column.model) ** 2
    assert panels["Resolved fraction"].get_xlim() == (0, 1)
    bold = panels["Total error"].lines[1].get_xydata()
    np.testing.assert_allclose(bold[60], [column.rehearsal.total_error[60] / column.model[60] ** 2, 49.0])
    assert panels["Resolved fraction"].lines[0].get_xdata() == [0.5, 0.5]
    index = sensitivity_figure("hole", column, tolerance=0.02, surface=SURFACE).axes[-1]
    assert [line.get_xdata()[0] for line in index.lines[:2]] == [0.1, 0.2]
    rungs = ladder_figure("hole", column, tolerance=0.02, surface=SURFACE).axes[1]
    labels = [text.get_text() for text in rungs.get_legend().get_texts()]
    assert labels == ["2 m · 16 nodes", "1 m · 31 nodes", "0.5 m · 61 nodes", "0.25 m · 121 nodes"]


def test_patterns_are_drawn_over_what_went_in_and_marked_where_bodies_come_back() -> None:
    truth = np.sin(ELEVATION)
    patterns = tuple(
        Pattern(name, size, truth, 0.5 * truth, np.where(ELEVATION > 50, size / 5, 0.0))
        for size in (1.0, 4.0)
        for name in ("checkerboard", "bodies")
    )
    figure = pattern_figure("hole", patterns, (ELEVATION,), surface=SURFACE)
    first, last = figure.axes[0], figure.axes[-1]
    np.testing.assert_array_equal(first.lines[1].get_xdata(), 0.5 * truth)
    (small, large) = (area.get_paths() for area in last.collections)
    assert list(small) == []
    assert large[0].get_extents().y0 == pytest.approx(50, abs=0.3)
    assert [label.get_text() for label in last.get_xticklabels()] == ["1", "4"]


def test_the_survey_figure_draws_the_coverage_beside_the_positions(column: Result) -> None:
    figure = survey_figure(
        "hole",
        paths=None,
        positions=POSITIONS,
        apparent=np.full(26, 5e-4),
        against={"depth (m)": np.arange(26.0)},
        apart={},
        seen=column.property,
        nodes=(ELEVATION,),
        coverage=column.coverage,
        surface=SURFACE,
    )
    assert figure.axes[0].get_xlabel() == "ray length per elevation"
    np.testing.assert_array_equal(figure.axes[0].lines[0].get_xdata(), column.coverage.values)
    assert figure.axes[1].get_ylabel() == "apparent velocity (m\N{NO-BREAK SPACE}s⁻¹)"


def test_no_words_leave_the_sheet_or_cover_each_other(column: Result, tmp_path: Path) -> None:
    figure = drawn(column)
    figure.draw_without_rendering()
    (axes,) = figure.axes
    boxes = [axes.get_legend().get_window_extent(), figure.legends[0].get_window_extent(),
             axes.xaxis.label.get_window_extent(), axes.title.get_window_extent()]  # fmt: skip
    boxes += [text.get_window_extent() for text in figure.texts]
    boxes = [box for box in boxes if box.width > 0]
    assert not any(a.overlaps(b) for i, a in enumerate(boxes) for b in boxes[:i])
    assert all(box.x0 >= 0 and box.x1 <= figure.bbox.width for box in boxes)
    options = RuleOptions()
    named = figures("hole", column, tolerance=0.02, options=options, surface=SURFACE, positions=POSITIONS)
    written = write_figures(tmp_path, "hole", named)
    assert "hole_column.png" in {path.name for path in written}


def test_known_ground_is_drawn_and_its_signs_cover_no_others(column: Result) -> None:
    table = pd.DataFrame(
        {"name": ["log", "rock"], "distance": 0.0, "z": [50.0, 40.0], "known": [1700.0, np.nan]}
    )
    figure = column_figure(
        "hole",
        column,
        tolerance=0.02,
        surface=SURFACE,
        positions=POSITIONS | {"station": np.array([[60.0]])},
        differences=replace(
            STEPPED, long_name="first differences of times reduced to the vertical, as usual"
        ),
        known=Overlay(table, "m s-1", "total error", 0),
    )
    figure.draw_without_rendering()
    (axes,) = figure.axes
    assert any(line.get_xydata().tolist() == [[1700.0, 50.0]] for line in axes.lines)
    assert any(np.ptp(line.get_ydata()) == 0 and line.get_ydata()[0] == 40.0 for line in axes.lines)
    assert not axes.get_legend().get_window_extent().overlaps(figure.legends[0].get_window_extent())


def test_an_interval_without_a_velocity_has_none_in_the_product(column: Result, provenance: Any) -> None:
    made = picture_dataset(
        "hole",
        column,
        easting=np.zeros(1),
        northing=np.zeros(1),
        crs=None,
        surface=SURFACE,
        tolerance=0.02,
        provenance=provenance,
        differences=replace(STEPPED, values=np.where(np.arange(25) < 2, [0.0] + [-1e-4] * 24, 5e-4)),
    )
    assert np.isnan(made["velocity_of_interval"][:2]).all()
    assert (made["velocity_of_interval"][2:] == 2000).all()
    np.testing.assert_allclose(made["slowness_of_interval"][:2], [0, -1e-4])
    assert float(made["velocity_average_down_to_10_m"]) == pytest.approx(1 / 6e-4)
    assert float(made["slowness_average_down_to_10_m_total_error"]) == 2e-6
