"""Laws of the figures that argue the stop: the rules' curves and badges, and what trusting each costs."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from itertools import combinations, pairwise

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from matplotlib.axes import Axes
from matplotlib.collections import PathCollection
from matplotlib.figure import Figure

from stillground.products.figures.badges import BADGES, badge_of, spread
from stillground.products.figures.rehearsal import rehearsal_figure
from stillground.products.figures.rules import BADGE, rules_figure
from stillground.protocols import Pick, Rehearsal, Result, RuleOptions


def labelled(figure: Figure) -> dict[str, Axes]:
    return {axes.get_ylabel(): axes for axes in figure.axes}


def levels(axes: Axes) -> list[float]:
    """Heights of level lines across a panel."""
    return [line.get_ydata()[0] for line in axes.lines if list(line.get_xdata()) == [0, 1]
            and line.get_ydata()[0] == line.get_ydata()[1]]  # fmt: skip


def badge_places(axes: Axes) -> list[tuple[float, float]]:
    """Middles of the badges above a panel, inches."""
    return [
        tuple(axes.transAxes.transform(text.xy) / axes.figure.dpi)
        for text in axes.texts
        if len(text.get_text()) == 1
    ]


def test_gcv_is_drawn_by_its_formula_and_the_target_where_the_rule_has_it(result: Result) -> None:
    # Golub, Heath and Wahba (1979): mean squared residual over the squared share of free data.
    options = RuleOptions(tau=1.2, gcv_factor=1.4, noise=2.0)
    by_label = labelled(rules_figure("crosshole-ab", result, options=options))
    history = result.history
    assert history.degrees_of_freedom is not None
    expected = 625 * history.residual_norm**2 / (625 - 1.4 * history.degrees_of_freedom) ** 2
    np.testing.assert_allclose(by_label["GCV"].lines[0].get_ydata(), expected)
    assert levels(by_label["mean squared residual"]) == [pytest.approx((1.2 * 2) ** 2)]


def test_whiteness_is_drawn_for_each_grouping_with_its_limit(result: Result) -> None:
    axes = labelled(rules_figure("crosshole-ab", result, options=RuleOptions()))["distance from white"]
    for line, name in zip(axes.lines[:2], ("source", "receiver"), strict=True):
        np.testing.assert_array_equal(line.get_ydata(), result.history.whiteness[name])
    assert axes.lines[0].get_linestyle() != axes.lines[1].get_linestyle()
    assert [text.get_text() for text in axes.get_legend().get_texts()] == [
        "within each source",
        "within each receiver",
        "white stays under 1.36",
    ]
    axes.figure.draw_without_rendering()
    legend = axes.get_legend().get_window_extent()
    assert legend.y1 < axes.xaxis.label.get_window_extent().y0
    assert legend.y0 > 0
    # Kolmogorov and Smirnov: 95 % of white noise stays under 1.36 (from memory).
    assert levels(axes) == [1.36]


def test_what_the_run_does_not_have_is_left_out(make: Callable[..., Result]) -> None:
    plain = make(probed=False, spacing=1.0)
    plain = replace(plain, history=replace(plain.history, whiteness={}))
    figure = rules_figure("crosshole-ab", plain, options=RuleOptions())
    assert set(labelled(figure)) == {"mean squared residual", "roughness", ""}


def test_every_rule_has_its_own_letter_and_shape() -> None:
    assert len({badge.letter for badge in BADGES.values()}) == len(BADGES) == 8
    assert len({badge.marker for badge in BADGES.values()}) == 8
    assert badge_of("noise-meter").letter == "N"


@pytest.mark.parametrize("last", [3, 30, 3000])
def test_badges_of_rules_that_agree_do_not_overlap(result: Result, last: int) -> None:
    choices = tuple(
        replace(choice, pick=Pick(9.0, True, ""), iteration=min(9.0, last)) for choice in result.choices
    )
    history = replace(
        result.history.upto(0),
        **{
            name: np.linspace(2.0, 1.0, last + 1)
            for name in ("residual_norm", "residual_step", "solution_norm", "step_norm")
        },
        degrees_of_freedom=None,
        gradient_norm=None,
        error_bound=None,
        whiteness={},
    )
    figure = rules_figure("ab", replace(result, choices=choices, history=history), options=RuleOptions())
    for name in ("mean squared residual", "roughness"):
        places = badge_places(labelled(figure)[name])
        assert len(places) == 8
        for (ax, ay), (bx, by) in combinations(places, 2):
            assert np.hypot(ax - bx, ay - by) >= BADGE * 0.99
        frame = figure.bbox.width / figure.dpi
        assert all(0.1 < x < frame - 0.1 for x, _ in places)


def test_no_word_of_the_rules_figure_leaves_the_sheet_or_hides_another(result: Result) -> None:
    figure = rules_figure("crosshole-ab", result, options=RuleOptions())
    (key,) = (axes for axes in figure.axes if not axes.axison)
    boxes = [text.get_window_extent() for text in key.texts]
    assert "\n".join(text.get_text() for text in key.texts).count("firm") == 5
    for box in boxes:
        assert figure.bbox.x0 < box.x0
        assert box.x1 < figure.bbox.x1
    words = [text for text in key.texts if len(text.get_text()) > 1]
    for one, other in combinations(words, 2):
        assert not one.get_window_extent().overlaps(other.get_window_extent())


def test_a_rule_without_a_pick_has_no_badge_but_a_line_in_the_key(result: Result) -> None:
    figure = rules_figure("crosshole-ab", result, options=RuleOptions())
    assert len(badge_places(labelled(figure)["roughness"])) == 7
    (key,) = (axes for axes in figure.axes if not axes.axison)
    assert [text.get_text() for text in key.texts].count("none") == 1


@given(
    at=st.lists(st.floats(-1, 11), max_size=14),
    gap=st.floats(0.01, 2),
)
def test_spread_positions_keep_order_gap_and_room(at: list[float], gap: float) -> None:
    moved = spread(at, gap, 0.0, 10.0)
    assert len(moved) == len(at)
    gap = min(gap, 10 / max(len(at) - 1, 1))
    order = np.argsort(at, kind="stable")
    for before, after in pairwise(np.array(moved)[order]):
        assert after - before >= gap * (1 - 1e-9)
    assert all(-1e-9 <= x <= 10 + 1e-9 for x in moved)


@given(st.lists(st.floats(0, 10), min_size=1, max_size=6, unique=True))
def test_positions_that_are_apart_stay(at: list[float]) -> None:
    gap = min(np.diff(np.sort(at)), default=1.0)
    np.testing.assert_allclose(spread(at, gap, 0.0, 10.0), at, atol=1e-9)


@pytest.fixture
def rehearsal(result: Result) -> Rehearsal:
    assert result.rehearsal is not None
    return result.rehearsal


def scattered(axes: Axes) -> list[PathCollection]:
    return [drawn for drawn in axes.collections if isinstance(drawn, PathCollection)]


def dots(axes: Axes) -> list[dict[int, float]]:
    """Ratio by row, of each kind of dot."""
    return [{int(row): x for x, row in drawn.get_offsets()} for drawn in scattered(axes)]


def test_a_rules_dots_are_its_median_its_ninety_per_cent_and_its_worst(rehearsal: Rehearsal) -> None:
    figure = rehearsal_figure("crosshole-ab", rehearsal, "gcv")
    layers = next(axes for axes in figure.axes if axes.get_title(loc="left") == "level layers")
    row = 6  # the l-curve's, after the five equals and quasi-optimality
    ratios = rehearsal.ratios["layers"]["l-curve"]
    worst, ninety, median = dots(layers)
    assert worst[row] == pytest.approx(ratios.max())
    assert ninety[row] == pytest.approx(np.quantile(ratios, 0.9))
    assert median[row] == pytest.approx(np.median(ratios))
    _, hollow, full = scattered(layers)
    assert len({tuple(colour) for colour in hollow.get_facecolor()}) == 1
    assert len({tuple(colour) for colour in full.get_facecolor()}) == 8
    assert layers.get_xscale() == "log"
    assert layers.get_xlim()[0] < 1
    assert layers.get_xlim()[1] > ratios.max()


def test_groups_of_equals_are_bands_and_the_chosen_rule_is_told(rehearsal: Rehearsal) -> None:
    figure = rehearsal_figure("crosshole-ab", rehearsal, "l-curve")
    backdrop = figure.axes[0]
    bands = [tuple(sorted({y for _, y in band.get_paths()[0].vertices})) for band in backdrop.collections]
    # Five equals, then one each; every other group is shaded.
    assert bands == [(-0.5, 4.5), (5.5, 6.5)]
    said = " ".join(" ".join(text.get_text() for text in figure.texts).split())
    assert "l-curve, the chosen one, is in band 3 of 4" in said
    weights = {text.get_text(): text.get_weight() for text in backdrop.texts}
    assert (weights["l-curve"], weights["gcv"], weights["60 %"]) == ("bold", "normal", "bold")


def test_a_rule_that_is_left_out_is_named_and_has_no_dots(rehearsal: Rehearsal) -> None:
    last = len(rehearsal.groups) - 1
    left_out = replace(rehearsal, groups=rehearsal.groups[:last], left_out={"hanke-raus": "does not apply"})
    figure = rehearsal_figure("ab", left_out, "risk")
    for axes in (axes for axes in figure.axes if axes.get_title(loc="left")):
        for kind in dots(axes):
            assert set(kind) == {0, 1, 2, 3, 4, 5, 6}
    assert any("Not applicable here: hanke-raus" in text.get_text() for text in figure.texts)


@pytest.mark.parametrize("worst", [1.0, 1.05, 40.0, 3000.0])
def test_ratios_of_any_size_are_drawn(rehearsal: Rehearsal, worst: float) -> None:
    ratios = {"prior": {rule: np.array([1.0, worst]) for rule in rehearsal.cost}}
    figure = rehearsal_figure("ab", replace(rehearsal, ratios=ratios), "gcv")
    axes = next(axes for axes in figure.axes if axes.get_title(loc="left"))
    assert axes.get_xlim()[1] > worst
    shown = [text.get_window_extent() for text in axes.get_xticklabels()]
    assert len(shown) >= 2
    assert not any(a.overlaps(b) for a, b in pairwise(shown))
