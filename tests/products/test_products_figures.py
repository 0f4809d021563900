"""Laws of the figures: true colours in true places, nothing cut off, the same bytes each time."""

from __future__ import annotations

import shutil
import subprocess
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from typing import Any

import matplotlib as mpl
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from matplotlib import colormaps
from matplotlib.figure import Figure
from matplotlib.font_manager import FontProperties
from matplotlib.image import imread
from matplotlib.textpath import text_to_path

from stillground.errors import OutputError
from stillground.products import figures
from stillground.products.figures import write_figures
from stillground.products.figures.aspect import WIDEST, elevation_label, exaggeration, proportions
from stillground.products.figures.errors import errors_figure
from stillground.products.figures.ladder import ladder_figure
from stillground.products.figures.pattern import pattern_figure
from stillground.products.figures.rehearsal import rehearsal_figure
from stillground.products.figures.residuals import residuals_figure
from stillground.products.figures.rules import rules_figure
from stillground.products.figures.section import section_figure
from stillground.products.figures.sensitivity import sensitivity_figure
from stillground.products.figures.sheet import LINE, VERDICTS, fitted, write_figure
from stillground.products.figures.survey import survey_figure
from stillground.protocols import Result, RuleOptions

from .made_up_results import axes_of, make_patterns, positions
from .pixels import colour_at

SOURCES, RECEIVERS = positions()
POSITIONS = {"source": SOURCES, "receiver": RECEIVERS}
PAPER = np.array([0xF6, 0xF4, 0xEE]) / 255


@pytest.fixture
def section(result: Result, surface: Any) -> Callable[..., Figure]:
    def draw(name: str = "crosshole-ab", shown: Result = result, **changed: Any) -> Figure:
        arguments: dict[str, Any] = {
            "tolerance": 0.02,
            "surface": surface,
            "positions": POSITIONS,
        }
        return section_figure(name, shown, **(arguments | changed))

    return draw


def test_the_colour_at_a_place_is_the_values_there(section: Callable[..., Figure], result: Result) -> None:
    figure = section()
    bar = figure.axes[1]
    scale = mpl.colors.Normalize(*bar.get_ylim())
    for distance, elevation in ((5.5, 53.0), (12.5, 44.5), (3.0, 40.0), (15.0, 58.0)):
        i = int(np.argmin(np.abs(result.axes[0] - distance)))
        j = int(np.argmin(np.abs(result.axes[1] - elevation)))
        expected = colormaps["cividis"](scale(1 / result.model[i, j]))[:3]
        np.testing.assert_allclose(colour_at(figure.axes[0], distance, elevation), expected, atol=0.02)


def test_unreliable_ground_is_blended_to_opaque_colour(
    section: Callable[..., Figure], result: Result
) -> None:
    # An alpha array would get lost in PDF: the image must have three channels.
    figure = section(tolerance=np.inf)
    assert np.asarray(figure.axes[0].images[0].get_array()).shape[2] == 3
    covered = replace(result, coverage=replace(result.coverage, values=np.ones_like(result.model)))
    clear = section(shown=covered, tolerance=np.inf)
    scales = [axes.get_ylim() for axes in (figure.axes[1], clear.axes[1])]
    clear_scale, faded_scale = (mpl.colors.Normalize(*limits) for limits in reversed(scales))
    value = 1 / result.model[0, 8]
    place = result.axes[0][0] + 0.02, result.axes[1][8]
    np.testing.assert_allclose(
        colour_at(clear.axes[0], *place), colormaps["cividis"](clear_scale(value))[:3], atol=0.02
    )
    full = np.array(colormaps["cividis"](faded_scale(value))[:3])
    np.testing.assert_allclose(colour_at(figure.axes[0], *place), 0.32 * full + 0.68 * PAPER, atol=0.02)


def test_hatching_is_where_the_flags_are_and_the_key_tells_it(
    section: Callable[..., Figure], result: Result
) -> None:
    def key(figure: Figure) -> list[str]:
        return [text.get_text() for text in figure.legends[0].get_texts()]

    everywhere = replace(result, coverage=replace(result.coverage, values=np.ones_like(result.model)))
    assert key(section(shown=everywhere)) == ["source", "receiver"]
    assert key(section()) == ["source", "receiver", "poorly covered"]
    assert key(section(tolerance=0.01)) == ["source", "receiver", "poorly covered", "depends on the grid"]


def test_scales_are_equal_both_ways(section: Callable[..., Figure]) -> None:
    axes = section().axes[0]
    assert axes.get_aspect() == 1
    corners = axes.transData.transform([(0, 40), (10, 50)])
    across, up = corners[1] - corners[0]
    assert across == pytest.approx(up, rel=1e-6)


def test_the_pdf_shows_the_fade_and_nothing_above_the_surface(
    section: Callable[..., Figure], result: Result, tmp_path: Path
) -> None:
    if shutil.which("pdftoppm") is None:
        pytest.skip("pdftoppm is not installed (Debian package poppler-utils)")
    figure = section()
    _, pdf = write_figure(tmp_path, "picture", figure)
    subprocess.run(["pdftoppm", "-r", "150", "-png", "-singlefile", pdf, pdf.with_suffix("")], check=True)
    page = imread(pdf.with_suffix(".png"))

    def around(distance: float, elevation: float) -> np.ndarray:
        """Middle colour of a patch, so that thin hatch lines do not count."""
        at = figure.axes[0].transData.transform((distance, elevation)) / figure.dpi * 150
        row, column = page.shape[0] - round(at[1]), round(at[0])
        return np.median(page[row - 12 : row + 12, column - 5 : column + 5, :3], axis=(0, 1))

    # Above the surface: the sheet. On the left margin: faded. Between the boreholes: full colour.
    np.testing.assert_allclose(around(0, 63.5), [1, 254 / 255, 251 / 255], atol=0.01)
    scale = mpl.colors.Normalize(*figure.axes[1].get_ylim())
    for distance, elevation, strength in ((-1.5, 44.0, 0.32), (9.0, 58.0, 1.0)):
        value = 1 / result.model[round(4 * (distance + 2)), round(4 * (elevation - 34))]
        full = np.array(colormaps["cividis"](scale(value))[:3])
        expected = strength * full + (1 - strength) * PAPER
        np.testing.assert_allclose(around(distance, elevation), expected, atol=0.03)


@pytest.mark.parametrize(
    "name",
    [
        "crosshole between boreholes A and B after the second grouting of the upstream cut-off wall",
        "W" * 200,
    ],
    ids=["words", "one word"],
)
def test_long_titles_do_not_overflow(
    name: str, section: Callable[..., Figure], result: Result, surface: Any
) -> None:
    ladder = replace(result.ladder, verdict=replace(result.ladder.verdict, reason=f"{name} {name} {name}"))
    assert result.rehearsal is not None
    wordy = replace(
        result, ladder=ladder, chosen=replace(result.chosen, pick=replace(result.chosen.pick, reason=name))
    )
    for figure in (
        section(name, wordy),
        rules_figure(name, wordy, options=RuleOptions()),
        ladder_figure(name, wordy, tolerance=0.02, surface=surface),
        residuals_figure(name, wordy),
        errors_figure(name, wordy, tolerance=0.02, surface=surface),
        sensitivity_figure(name, wordy, tolerance=0.02, surface=surface),
        rehearsal_figure(name, wordy.rehearsal, wordy.chosen.rule),
        pattern_figure(name, make_patterns(axes_of(1.0)), axes_of(1.0), surface=surface),
    ):
        whole = figure.bbox
        for text in figure.texts:
            box = text.get_window_extent()
            assert whole.x0 < box.x0
            assert box.x1 < whole.x1, text.get_text()
            assert whole.y0 < box.y0
            assert box.y1 < whole.y1


@given(
    text=st.text(st.sampled_from("abcW ,-"), max_size=120),
    room=st.integers(40, 400),
    n_lines=st.integers(1, 3),
)
def test_fitted_text_fits_and_loses_nothing_without_saying(text: str, room: int, n_lines: int) -> None:
    font = FontProperties(family="DejaVu Sans", size=8)
    lines = fitted(text, 8, "normal", room, n_lines).split("\n")
    assert len(lines) <= n_lines
    for line in lines:
        assert text_to_path.get_text_width_height_descent(line, font, ismath=False)[0] <= room
    if not lines[-1].endswith("…"):
        assert "".join(lines).replace(" ", "") == text.replace(" ", "")


def test_a_dollar_sign_is_no_formula(section: Callable[..., Figure]) -> None:
    figure = section("pump $5 at $x_1")
    assert not any(text.get_parse_math() for text in figure.texts)


def test_verdicts_do_not_hang_on_colour() -> None:
    assert len({marker for marker, _, _ in VERDICTS.values()}) == 3


def test_the_order_lines_go_through_the_last_change_with_their_slopes(result: Result, surface: Any) -> None:
    verdict = replace(result.ladder.verdict, order=1.7, expected=2.0)
    made = replace(result, ladder=replace(result.ladder, verdict=verdict))
    figure = ladder_figure("crosshole-ab", made, tolerance=0.02, surface=surface)
    axes = figure.axes[0]
    for style, order in (("--", 1.7), (":", 2.0)):
        (line,) = (line for line in axes.lines if line.get_linestyle() == style and line.get_color() == LINE)
        spacing, change = np.log(line.get_xdata()), np.log(line.get_ydata())
        assert np.diff(change)[0] / np.diff(spacing)[0] == pytest.approx(order)
        assert np.interp(np.log(0.25), spacing, change) == pytest.approx(np.log(result.ladder.change[-1]))
    assert axes.get_title(loc="left") == "order 1.7 (dashed), expected 2 (dotted)"
    assert any("index: 0.09 % of the rms anomaly" in text.get_text() for text in figure.texts)


def test_without_a_limit_or_an_index_the_ladder_figure_says_so(
    make: Callable[..., Result], surface: Any
) -> None:
    made = make(word="drifting")
    verdict = replace(made.ladder.verdict, order=-0.1, expected=0.0)
    made = replace(made, ladder=replace(made.ladder, verdict=verdict))
    figure = ladder_figure("crosshole-ab", made, tolerance=0.02, surface=surface)
    assert figure.axes[0].get_title(loc="left") == "order -0.1 (dashed), no limit (dotted)"
    assert any("index: none" in text.get_text() for text in figure.texts)


@pytest.mark.parametrize(("word", "levels"), [("undecided", 1), ("undecided", 2), ("drifting", 6)])
def test_any_number_of_rungs_is_drawn(
    make: Callable[..., Result], surface: Any, word: str, levels: int
) -> None:
    figure = ladder_figure("crosshole-ab", make(word=word, levels=levels), tolerance=0.01, surface=surface)
    assert len(figure.axes) == 1 + levels
    for axes in figure.axes:
        assert 0 <= axes.get_position().x0 < axes.get_position().x1 <= 1


def test_repeated_measurements_are_averaged_and_gaps_stay_blank(result: Result) -> None:
    few = replace(
        result,
        observed=np.array([1.0, 3.0, 5.0]),
        predicted=np.zeros(3),
        errors=np.ones(3),
        groupings={"source": np.array([0, 0, 1]), "receiver": np.array([0, 0, 1])},
    )
    matrix = np.ma.filled(residuals_figure("few", few).axes[0].images[0].get_array(), np.nan)
    np.testing.assert_array_equal(matrix, [[2, np.nan], [np.nan, 5]])


@pytest.mark.parametrize(("weights", "said"), [((1, 0.2, 0.4), "2 outlying data"), ((1, 1, 0.6), None)])
def test_outliers_are_counted_beside_the_fit(
    result: Result, weights: tuple[float, ...], said: str | None
) -> None:
    few = replace(
        result,
        observed=np.ones(3),
        predicted=np.zeros(3),
        errors=np.ones(3),
        groupings={},
        weights=np.array(weights),
    )
    texts = [text.get_text() for text in residuals_figure("few", few).texts]
    head = " ".join(" ".join(texts).split())
    assert ("outlying" in head) is (said is not None)
    assert said is None or said in head


@pytest.mark.parametrize("n_groupings", [0, 1])
def test_data_without_two_groupings_are_drawn_in_their_order(result: Result, n_groupings: int) -> None:
    groupings = dict(list(result.groupings.items())[:n_groupings])
    figure = residuals_figure("line", replace(result, groupings=groupings))
    assert figure.axes[0].get_xlabel() == "datum, in the table's order"
    assert len(figure.axes) == 2 + n_groupings


def test_the_apparent_property_is_drawn_as_people_read_it_against_what_the_kind_says(
    result: Result, surface: Any, tmp_path: Path
) -> None:
    i, j = result.groupings["source"], result.groupings["receiver"]
    length = np.hypot(*(RECEIVERS[j] - SOURCES[i]).T)
    figure = survey_figure(
        "crosshole-ab",
        paths=(SOURCES[i], RECEIVERS[j]),
        positions=POSITIONS,
        against={"offset (m)": length},
        apart={},
        apparent=result.observed / length,
        seen=result.property,
        nodes=result.axes,
        coverage=result.coverage,
        surface=surface,
    )
    (axes,) = figure.axes[2:]
    np.testing.assert_allclose(axes.lines[0].get_xdata(), length)
    np.testing.assert_allclose(axes.lines[0].get_ydata(), length / result.observed)
    assert (axes.get_xlabel(), axes.get_ylabel()) == (
        "offset (m)",
        "apparent velocity (m\N{NO-BREAK SPACE}s⁻¹)",
    )
    assert write_figure(tmp_path, "survey", figure)[0].stat().st_size > 10_000


def test_sorts_of_data_are_told_apart_in_a_flat_survey_with_its_plots_below(result: Result) -> None:
    first = np.arange(result.observed.size) % 3 == 0
    figure = survey_figure(
        "line",
        paths=None,
        positions={},
        against={"distance (m)": result.observed},
        apart={"across": first, "along": ~first},
        apparent=result.observed,
        seen=result.property,
        nodes=(np.linspace(0, 60, result.axes[0].size), np.linspace(200, 212, result.axes[1].size)),
        coverage=result.coverage,
        surface=None,
    )
    section, _, plot = figure.axes
    for line, those in zip(plot.lines[:2], (first, ~first), strict=True):
        np.testing.assert_array_equal(line.get_xdata(), result.observed[those])
    assert len({(line.get_marker(), line.get_color()) for line in plot.lines[:2]}) == 2
    assert [text.get_text() for text in figure.legends[0].get_texts()] == ["across", "along", "median"]
    assert plot.get_position().y1 < section.get_position().y0


def test_figures_come_out_the_same_whatever_the_users_settings(
    make: Callable[..., Result], surface: Any, tmp_path: Path
) -> None:
    coarse = make(spacing=0.5)
    written = []
    for folder, settings in (
        ("a", {}),
        ("b", {"font.size": 20, "axes.labelweight": "bold", "savefig.dpi": 30}),
    ):
        with mpl.rc_context(settings):
            drawn = figures.figures(
                "crosshole-ab",
                coarse,
                tolerance=0.02,
                options=RuleOptions(),
                surface=surface,
                positions=POSITIONS,
            )
            paths = write_figures(tmp_path / folder, "crosshole-ab", drawn)
        written.append({path.name: path.read_bytes() for path in paths})
    kinds = ("section", "errors", "rules", "ladder", "residuals", "rehearsal", "sensitivity")
    assert set(written[0]) == {f"crosshole-ab_{kind}.{ending}" for kind in kinds for ending in ("png", "pdf")}
    for name, first in written[0].items():
        assert written[1][name] == first, name


def test_figures_of_what_was_not_asked_for_are_left_out(make: Callable[..., Result]) -> None:
    plain = make(argued=False, spacing=1.0)
    options = RuleOptions()
    drawn = figures.figures("ab", plain, tolerance=0.02, options=options, surface=None, positions=POSITIONS)
    assert list(drawn) == ["section", "errors", "rules", "ladder", "residuals"]


def test_figures_that_cannot_be_written_are_named(section: Callable[..., Figure], tmp_path: Path) -> None:
    (tmp_path / "figures").write_text("")
    with pytest.raises(OutputError, match=r"picture\.png cannot be written"):
        write_figure(tmp_path / "figures", "picture", section())


def test_a_script_that_the_font_lacks_is_no_fault(section: Callable[..., Figure], tmp_path: Path) -> None:
    write_figure(tmp_path, "picture", section("堰"))


def test_figures_do_without_the_stateful_interface() -> None:
    # It costs import time and keeps every figure alive.
    sources = Path(figures.__file__).parent.glob("*.py")
    assert not [path.name for path in sources if "pyplot" in path.read_text(encoding="utf-8")]


@pytest.mark.parametrize(
    ("across", "up", "times"),
    [(18.0, 25.0, 1), (60.0, 20.0, 1), (60.0, 16.0, 2), (60.0, 8.0, 3), (900.0, 20.0, 20)],
)
def test_long_thin_sections_are_exaggerated_and_say_so(across: float, up: float, times: int) -> None:
    nodes = (np.array([0.0, across]), np.array([0.0, up]))
    assert exaggeration(nodes) == times
    wide, tall = proportions(nodes)
    assert wide == across
    assert wide / tall <= WIDEST
    assert elevation_label(nodes) == (
        "elevation (m)" if times == 1 else f"elevation (m)\n{times} times exaggerated"
    )


def test_every_picture_of_a_long_thin_section_has_its_exaggeration(result: Result) -> None:
    """Ten times as long as it is: as wide as three heights in every figure, the field in its true place."""
    distance, elevation = result.axes
    long = replace(result, axes=(10 * distance, elevation + 2000))
    times = exaggeration(long.axes)
    assert times > 1
    arguments: dict[str, Any] = {"tolerance": 0.02, "surface": None}
    ladder = replace(
        long.ladder,
        rungs=tuple(replace(r, axes=(10 * r.axes[0], r.axes[1] + 2000)) for r in long.ladder.rungs),
    )
    long = replace(long, ladder=ladder)
    drawn = {
        "section": section_figure("long", long, positions={}, **arguments),
        "errors": errors_figure("long", long, **arguments),
        "ladder": ladder_figure("long", long, **arguments),
    }
    for name, figure in drawn.items():
        maps = [axes for axes in figure.axes if axes.images]
        assert maps, name
        for axes in maps:
            assert axes.get_aspect() == times
            figure.draw_without_rendering()
            place, size = axes.get_position(original=True), figure.get_size_inches()
            # The frame already has the proportions: nothing is shrunk into it.
            extent = axes.get_window_extent().width / axes.get_window_extent().height
            assert extent == pytest.approx(place.width * size[0] / (place.height * size[1]), rel=1e-6)
            assert extent == pytest.approx(np.divide(*proportions(long.axes)), rel=1e-3)
        assert figure.get_tightbbox().x0 >= 0, "the words at the axis stay on the sheet"
        words = [axes.get_ylabel() for axes in figure.axes] + [text.get_text() for text in figure.texts]
        assert any(f"{times} times exaggerated" in word for word in words), name
