"""Laws of data against distance: every datum in its place, its curve its own, none where there is no line."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pytest
from matplotlib.axes import Axes
from matplotlib.collections import LineCollection
from numpy.testing import assert_allclose, assert_array_equal

from stillground import read_survey, reconstruct_survey
from stillground.config import load
from stillground.pipeline.grids import plan_grids
from stillground.pipeline.inspect import Plan, draw
from stillground.pipeline.profiles import read_profiles
from stillground.products.data_curves import DataCurves, data_curves
from stillground.products.figures.distance import distance_figure

SHOTS, RECEIVERS = np.array([20.0, 0.0, 40.0]), np.arange(1.0, 40.0, 2.0)
SURFACE = (np.array([0.0, 40.0]), np.array([100.0, 104.0]))
GROUPINGS = dict(zip(("source", "receiver"), (g.ravel() for g in np.indices((3, 20))), strict=True))


def placed(along: np.ndarray, depth: float | np.ndarray = 0.0) -> np.ndarray:
    return np.column_stack([along, np.interp(along, *SURFACE) - depth])


def line(**changed: Any) -> DataCurves | None:
    """Made-up first arrivals at 500 m/s, each 0.5 ms later than predicted, errors 1 ms."""
    predicted = np.abs(RECEIVERS[GROUPINGS["receiver"]] - SHOTS[GROUPINGS["source"]]) / 500
    given: dict[str, Any] = {
        "groupings": GROUPINGS,
        "positions": {"source": placed(SHOTS), "receiver": placed(RECEIVERS)},
        "surface": SURFACE,
        "datum": "time",
        "unit": "ms",
        "si_factor": 1e-3,
        "observed": predicted + 5e-4,
        "errors": np.full(60, 1e-3),
        "predicted": predicted,
        "weights": np.where(np.arange(60) == 7, 0.2, 1.0),
    }
    return data_curves(**(given | changed))


def known(curves: DataCurves | None) -> DataCurves:
    assert curves is not None
    return curves


def dots(axes: Axes) -> list[np.ndarray]:
    """Distances and values of the dots of each branch."""
    return [np.array(one.get_data()) for one in axes.lines if one.get_marker() == "o" and one.get_ms() < 5]


def test_every_datum_is_at_its_receiver_at_its_time_with_its_error() -> None:
    axes = distance_figure("toe", known(line())).axes[0]
    drawn = np.hstack(dots(axes)).T
    expected = np.column_stack(
        [RECEIVERS[GROUPINGS["receiver"]], 2 * np.abs(RECEIVERS[None] - SHOTS[:, None]).ravel() + 0.5]
    )
    assert_allclose(sorted(drawn.tolist()), sorted(expected.tolist()))
    bars = np.concatenate([c.get_segments() for c in axes.collections if isinstance(c, LineCollection)])
    assert_allclose(np.ptp(bars[:, :, 1], axis=1), 2.0)
    assert_allclose(sorted(bars.mean(axis=1).tolist()), sorted(expected.tolist()))
    assert (axes.get_xlabel(), axes.get_ylabel()) == ("distance of the receiver (m)", "time (ms)")
    assert axes.get_ylim()[0] == 0


def test_a_curve_is_parted_at_its_source_and_has_one_colour() -> None:
    axes = distance_figure("toe", known(line())).axes[0]
    branches = dots(axes)
    # By the distance of the sources: the one in the middle sees both ways.
    assert [(b[0].min(), b[0].max()) for b in branches] == [(1, 39), (1, 19), (21, 39), (1, 39)]
    colours = [one.get_color() for one in axes.lines if one.get_marker() == "o" and one.get_ms() < 5]
    assert colours[1] == colours[2]
    assert len(set(colours)) == 3


def test_the_answers_times_are_lines_and_light_data_are_ringed() -> None:
    figure = distance_figure("toe", known(line()))
    axes = figure.axes[0]
    lines = [one for one in axes.lines if one.get_linestyle() == "-" and one.get_marker() == "None"]
    assert_allclose(lines[1].get_xydata(), [(x, 2 * (20 - x)) for x in range(1, 21, 2)])
    (ring,) = [one for one in axes.lines if one.get_marker() == "o" and one.get_ms() > 5]
    assert_allclose(ring.get_xydata(), [(15.0, 10.5)])
    key = [text.get_text() for text in figure.legends[0].get_texts()]
    assert key == ["source", "observed", "predicted by the answer", "counts less than half"]


def test_before_an_answer_lines_join_the_data_of_a_source() -> None:
    figure = distance_figure("toe", known(line(predicted=None, weights=None)))
    lines = [one for one in figure.axes[0].lines if one.get_linestyle() == "-" and one.get_marker() == "None"]
    assert_allclose(lines[1].get_xydata(), [(x, 2 * (20 - x) + 0.5) for x in range(1, 21, 2)])
    assert [text.get_text() for text in figure.legends[0].get_texts()] == ["source", "observed"]
    assert "60 data of 3 sources; lines join the data of one; bars: one standard error, 1 ms" in [
        text.get_text() for text in figure.texts
    ]


def test_sources_stand_at_the_foot() -> None:
    figure = distance_figure("toe", known(line()))
    axes = figure.axes[0]
    (stars,) = [one for one in axes.lines if one.get_marker() == "*"]
    on_sheet = stars.get_transform().transform(stars.get_xydata())
    assert_allclose(axes.transData.inverted().transform(on_sheet), [(x, 0.0) for x in (0, 20, 40)], atol=1e-9)


def test_many_sources_are_thinned_and_the_figure_says_so() -> None:
    groups = {name: g.ravel() for name, g in zip(GROUPINGS, np.indices((90, 20)), strict=True)}
    shots = np.linspace(0, 40, 90)
    times = np.full(1800, 0.01)
    figure = distance_figure(
        "toe",
        known(
            line(
                groupings=groups,
                positions={"source": placed(shots), "receiver": placed(RECEIVERS)},
                observed=times,
                errors=times,
                predicted=times,
                weights=times,
            )
        ),
    )
    (stars,) = [one for one in figure.axes[0].lines if one.get_marker() == "*"]
    assert len(stars.get_xdata()) == 30
    assert "1800 data of 90 sources, 30 of them drawn" in "".join(text.get_text() for text in figure.texts)
    ringed = [one for one in figure.axes[0].lines if one.get_marker() == "o" and one.get_ms() > 5]
    assert len(ringed[0].get_xdata()) == 600, "only data that are drawn"


@pytest.mark.parametrize("depth", [0.0, 1.5])
def test_buried_shots_belong_to_the_line(depth: float) -> None:
    assert (
        known(line(positions={"source": placed(SHOTS, depth), "receiver": placed(RECEIVERS)})).number.size
        == 60
    )


def test_data_into_a_borehole_are_left_out() -> None:
    depth = np.where(np.arange(20) < 12, 0.0, np.arange(20) - 8.0)
    curves = known(line(positions={"source": placed(SHOTS), "receiver": placed(RECEIVERS, depth)}))
    assert_array_equal(curves.distance, np.tile(RECEIVERS[:12], 3))
    assert_array_equal(curves.number, np.repeat(np.arange(3), 12))


def test_there_are_no_curves_without_a_line_on_a_surface() -> None:
    boreholes = {
        "source": placed(np.zeros(3), np.array([0.0, 5.0, 10.0])),
        "receiver": placed(np.full(20, 40.0), np.linspace(0, 30, 20)),
    }
    assert line(positions=boreholes) is None
    assert line(surface=None) is None
    assert line(positions={"source": placed(SHOTS)}) is None, "as where stations stand alone"
    column = {name: places[:, 1:] for name, places in boreholes.items()}
    assert line(positions=column) is None


@pytest.mark.parametrize(
    ("config", "names"),
    [
        ("osmere-weir-refraction", ["refraction_survey.png", "refraction_picks.png"]),
        ("osmere-weir-downhole", ["downhole-b3_survey.png"]),
    ],
)
def test_inspect_draws_them_where_there_are_some(
    config: str, names: list[str], demo: Path, tmp_path: Path
) -> None:
    settings, _ = load(demo.parent / f"{config}.toml")
    profile = read_profiles(settings)[0]
    plan = Plan(profile, plan_grids(profile, settings), (), 0, {})
    written = draw(plan, settings, tmp_path)
    assert [path.name for path in written] == names
    assert {path.stem for path in (tmp_path / "figures").iterdir()} == {path.stem for path in written}


def test_a_run_draws_them_with_what_the_answer_predicts(demo: Path) -> None:
    survey = read_survey(demo.parents[1] / "datasets" / "osmere-weir" / "refraction.csv")
    found = reconstruct_survey(
        survey.isel(datum=slice(None, None, 5)),
        kind="curved-ray",
        errors={"floor": "0.3 ms"},
        ground={"spacing": "2 m", "correlation": {"horizontal": "12 m", "vertical": "4 m"}},
        refinement={"levels": 1},
        solver={"iterations": 5},
    )
    axes = found.plot("time_distance").axes[0]
    observed = np.hstack(dots(axes))
    lines = [one for one in axes.lines if one.get_linestyle() == "-" and one.get_marker() == "None"]
    predicted = np.hstack([one.get_data() for one in lines])
    fit = found.fit.sort_values(["receiver_distance [m]", "observed_time [ms]"])
    order = np.lexsort(observed[::-1])
    assert_allclose(observed[:, order].T, fit[["receiver_distance [m]", "observed_time [ms]"]], rtol=1e-9)
    assert_allclose(predicted[1, order], fit["predicted_time [ms]"], rtol=1e-9)
