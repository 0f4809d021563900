"""Laws of the figures of errors, sensitivity and patterns: true values in true places, on one scale."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import matplotlib as mpl
import numpy as np
import pytest
from matplotlib import colormaps
from matplotlib.axes import Axes
from matplotlib.figure import Figure

from stillground.products.figures.errors import errors_figure
from stillground.products.figures.maps import ERROR_COLOURS, GOOD_COLOURS, tiling
from stillground.products.figures.pattern import pattern_figure
from stillground.products.figures.sensitivity import sensitivity_figure
from stillground.products.reading import shown_change
from stillground.protocols import GroundProperty, Result

from .made_up_results import axes_of, make_patterns
from .pixels import colour_at

PLACES = ((5.5, 53.0), (12.5, 44.5), (3.0, 40.0), (15.0, 58.0))
PAPER = np.array([0xF6, 0xF4, 0xEE]) / 255


@pytest.fixture
def sound(result: Result) -> Result:
    """All ground is reliable, so that colours are not faded."""
    return replace(
        result,
        coverage=replace(result.coverage, values=np.ones_like(result.model)),
        mesh_change=np.zeros_like(result.model),
    )


def maps(figure: Figure) -> dict[str, Axes]:
    return {axes.get_title(loc="left"): axes for axes in figure.axes if axes.images}


def bars(figure: Figure) -> list[Axes]:
    """Scales below the maps."""
    return [axes for axes in figure.axes if "of velocity" in axes.get_xlabel()]


def test_errors_are_those_of_velocity_on_one_scale(sound: Result, surface: Any) -> None:
    figure = errors_figure("crosshole-ab", sound, tolerance=0.02, surface=surface)
    drawn = maps(figure)
    assert list(drawn) == ["Noise part", "Total error", "Resolved fraction"]
    scales = [axes.get_xlim() for axes in bars(figure)]
    assert len(scales) == 2
    assert scales[0] == scales[1]
    scale = mpl.colors.Normalize(*scales[0])
    assert sound.rehearsal is not None
    for distance, elevation in PLACES:
        i, j = round(4 * (distance + 2)), round(4 * (elevation - 34))
        slowness = sound.model[i, j]
        for title, error in (
            ("Noise part", sound.noise_part),
            ("Total error", sound.rehearsal.total_error),
        ):
            # How far velocity moves for a small move of slowness, by a difference.
            moved = (1 / (slowness - 1e-3 * error[i, j]) - 1 / slowness) / 1e-3
            expected = ERROR_COLOURS(scale(moved))[:3]
            np.testing.assert_allclose(colour_at(drawn[title], distance, elevation), expected, atol=0.02)
        expected = GOOD_COLOURS(sound.rehearsal.resolved[i, j])[:3]
        found = colour_at(drawn["Resolved fraction"], distance, elevation)
        np.testing.assert_allclose(found, expected, atol=0.02)


def test_small_errors_are_not_blown_up(sound: Result) -> None:
    # The scale reaches to the anomaly at least: an error of a tenth of it is a tenth along.
    tiny = replace(sound, rehearsal=None, noise_part=np.full_like(sound.model, sound.anomaly / 10))
    figure = errors_figure("crosshole-ab", tiny, tolerance=0.02, surface=None)
    (bar,) = bars(figure)
    expected = sound.anomaly / np.median(sound.model) ** 2
    assert bar.get_xlim()[1] == pytest.approx(expected, rel=0.05)


def test_without_a_rehearsal_the_noise_part_stands_alone_and_says_so(sound: Result) -> None:
    figure = errors_figure("crosshole-ab", replace(sound, rehearsal=None), tolerance=0.02, surface=None)
    assert list(maps(figure)) == ["Noise part"]
    said = " ".join(text.get_text() for text in figure.texts)
    assert "not its error" in said
    assert "rehearsal.twins = 30" in said


def test_unreliable_ground_is_faded_and_the_least_error_still_is_no_paper(result: Result) -> None:
    figure = errors_figure("crosshole-ab", result, tolerance=np.inf, surface=None)
    clear = errors_figure(
        "crosshole-ab",
        replace(result, coverage=replace(result.coverage, values=np.ones_like(result.model))),
        tolerance=np.inf,
        surface=None,
    )
    for title, axes in maps(figure).items():
        full = colour_at(maps(clear)[title], -1.9, 44.0)
        faded = colour_at(axes, -1.9, 44.0)
        assert np.abs(faded - PAPER).sum() < 0.5 * np.abs(full - PAPER).sum()
    key = [text.get_text() for text in figure.legends[0].get_texts()]
    assert key == ["half comes back", "poorly covered"]
    assert np.abs(np.array(ERROR_COLOURS(0.0)[:3]) - PAPER).max() > 0.2


def test_a_property_without_a_reciprocal_keeps_its_unit(sound: Result) -> None:
    plain = replace(sound, property=GroundProperty("conductivity", "S m-1", "electrical conductivity"))
    np.testing.assert_array_equal(
        shown_change(plain.property, plain.model, plain.noise_part), plain.noise_part
    )
    figure = errors_figure("line", plain, tolerance=0.02, surface=None)
    assert "of conductivity (S\N{NO-BREAK SPACE}m⁻¹)" in [axes.get_xlabel() for axes in figure.axes]


def test_bars_are_as_long_as_the_picture_moves(result: Result, surface: Any) -> None:
    figure = sensitivity_figure("crosshole-ab", result, tolerance=0.02, surface=surface)
    axes = next(axes for axes in figure.axes if axes.patches and not axes.images)
    assert [bar.get_width() for bar in axes.patches] == pytest.approx([39, 21, 35])
    words = [text.get_text() for text in axes.texts]
    assert words[::2] == ["lengths halved", "lengths doubled", "background less 10 %"]
    assert words[1::2] == ["stop 7.3", "stop 13.2", "stop 11"]
    boxes = [text.get_window_extent() for text in axes.texts]
    assert not any(a.overlaps(b) for a, b in zip(boxes[::2], boxes[1::2], strict=True))


def test_spread_and_index_are_drawn_where_they_are(sound: Result) -> None:
    figure = sensitivity_figure("crosshole-ab", sound, tolerance=0.02, surface=None)
    drawn = maps(figure)
    assert sound.sensitivity is not None
    (bar,) = bars(figure)
    scale = mpl.colors.Normalize(*bar.get_xlim())
    for distance, elevation in PLACES:
        i, j = round(4 * (distance + 2)), round(4 * (elevation - 34))
        change = sound.sensitivity.spread[i, j] / sound.model[i, j] ** 2
        found = colour_at(drawn["Spread by lengths, smoothness"], distance, elevation)
        np.testing.assert_allclose(found, ERROR_COLOURS(scale(change))[:3], atol=0.02)
        expected = GOOD_COLOURS(1 - sound.sensitivity.investigation[i, j])[:3]
        np.testing.assert_allclose(
            colour_at(drawn["Investigation index"], distance, elevation), expected, atol=0.02
        )


def test_nothing_moved_is_drawn_too(sound: Result) -> None:
    assert sound.sensitivity is not None
    still = replace(
        sound.sensitivity,
        variations=tuple(replace(varied, distance=0.0) for varied in sound.sensitivity.variations),
        spread=np.zeros_like(sound.model),
        investigation=np.zeros_like(sound.model),
    )
    sensitivity_figure("ab", replace(sound, sensitivity=still), tolerance=0.02, surface=None)


@pytest.mark.parametrize(
    ("extent", "n", "columns"),
    [((20, 30), 3, 3), ((90, 30), 3, 1), ((200, 15), 3, 1), ((20, 20), 4, 2), ((5, 80), 8, 8)],
)
def test_maps_fill_their_room_and_stay_in_it(extent: tuple[int, int], n: int, columns: int) -> None:
    nodes = (np.array([0.0, extent[0]]), np.array([0.0, extent[1]]))
    tiles = tiling(n, nodes, (6.5, 6.5), (0.5, 1.0))
    assert tiles.columns == columns
    times = 5 if extent == (200, 15) else 1  # a long thin section is exaggerated
    assert tiles.width / tiles.height == pytest.approx(extent[0] / (times * extent[1]))
    wide = tiles.columns * tiles.width + (tiles.columns - 1) * 0.5
    high = tiles.rows * (tiles.height + 1.0)
    assert max(wide, high) == pytest.approx(6.5)


@pytest.fixture(params=[(1.0, 1.0), (2.0, 0.6)], ids=["portrait", "wide"])
def stretched(request: pytest.FixtureRequest, surface: Any) -> tuple[Any, Any]:
    """Nodes and surface of the patterns, as they are and stretched to a wide section."""
    along, up = request.param
    distance, elevation = axes_of(0.5)
    return (
        (along * distance, 34 + up * (elevation - 34)),
        (along * surface[0], 34 + up * (surface[1] - 34)),
    )


def test_patterns_stand_in_rows_of_sizes_what_went_in_before_what_came_back(
    stretched: tuple[Any, Any],
) -> None:
    nodes, surface = stretched
    patterns = make_patterns(axes_of(0.5))
    figure = pattern_figure("crosshole-ab", patterns, nodes, surface=surface)
    shown = [axes for axes in figure.axes if axes.images]
    ordered = sorted(patterns, key=lambda pattern: pattern.size)
    fields = [field for pattern in ordered for field in (pattern.truth, pattern.returned)]
    for axes, field in zip(shown, fields, strict=True):
        # The nodes at distance 5 m and elevation 51 m of the unstretched section.
        found = colour_at(axes, nodes[0][14], nodes[1][34])
        expected = colormaps["PuOr_r"]((field[14, 34] + 1) / 2)[:3]
        np.testing.assert_allclose(found, expected, atol=0.08)
    places = [axes.get_position() for axes in shown]
    # Read line by line they come in order, and what came back stands beside what went in.
    assert places == sorted(places, key=lambda place: (-round(place.y0, 6), place.x0))
    for truth, back in zip(places[::2], places[1::2], strict=True):
        assert truth.y0 == back.y0
        assert truth.x1 < back.x0
    named = {text.get_text() for text in figure.texts if text.get_text().endswith(" m")}
    assert {name.split("\n")[-1] for name in named} == {"2 m", "4 m"}


def test_the_map_of_sizes_shows_the_smallest_that_comes_back(stretched: tuple[Any, Any]) -> None:
    nodes, surface = stretched
    figure = pattern_figure("crosshole-ab", make_patterns(axes_of(0.5)), nodes, surface=surface)
    (axes,) = (axes for axes in figure.axes if axes.get_title(loc="left") == "smallest bodies that come back")
    named = {text.get_text(): patch for text, patch in zip(
        axes.get_legend().get_texts(), axes.get_legend().get_patches(), strict=True)}  # fmt: skip
    assert list(named) == ["2 m", "4 m", "none"]
    # Later areas lie on top of earlier ones.
    for i, j, size in ((14, 34, "2 m"), (34, 34, "4 m"), (14, 8, "2 m"), (34, 4, "none")):
        place = (nodes[0][i], nodes[1][j])
        above = [area for area in axes.collections if area.get_paths()[0].contains_point(place)]
        colour = above[-1].get_facecolor()[0] if above else np.append(PAPER, 1)
        np.testing.assert_allclose(colour, named[size].get_facecolor(), atol=1e-6)
    boxes = [axes.get_legend().get_window_extent() for axes in figure.axes if axes.get_legend()]
    assert all(0 < box.y0 < box.y1 < figure.bbox.y1 for box in boxes)


def test_patterns_without_bodies_have_no_map_of_sizes(surface: Any) -> None:
    axes = axes_of(1.0)
    boards = tuple(pattern for pattern in make_patterns(axes) if pattern.name == "checkerboard")
    figure = pattern_figure("ab", boards, axes, surface=surface)
    assert not any("smallest" in axes.get_title(loc="left") for axes in figure.axes)
