"""Laws of the figure of the outer steps of a nonlinear measurement."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from stillground.products.figures import figures
from stillground.products.figures.steps import steps_figure
from stillground.protocols import Result, RuleOptions

from .made_up_results import make_outer_steps


def test_each_step_goes_on_where_the_one_before_ended_and_the_last_linearisation_after_them(
    result: Result,
) -> None:
    steps = make_outer_steps()
    chosen = replace(result.chosen, chi_square_recomputed=1.2)
    figure = steps_figure("ab", replace(result, chosen=chosen), steps)
    (axes,) = figure.axes
    drawn = {line.get_label(): line for line in axes.lines}
    recomputed = drawn["recomputed after each step"]
    np.testing.assert_array_equal(recomputed.get_xdata(), [0, 2, 5, 6])
    np.testing.assert_array_equal(recomputed.get_ydata(), steps.misfits)
    last = drawn["last linearisation"]
    assert last.get_xdata()[0] == 6
    np.testing.assert_array_equal(last.get_ydata(), result.history.chi_square)
    answer = drawn["the answer, recomputed"]
    assert (answer.get_xdata()[0], answer.get_ydata()[0]) == (6 + chosen.iteration, 1.2)
    legend = [text.get_text() for text in axes.get_legend().get_texts()]
    assert legend.count("linearised") == legend.count("target of the step") == 1


def test_only_nonlinear_measurements_have_the_figure(result: Result) -> None:
    given = {"tolerance": 0.02, "options": RuleOptions(), "surface": None, "positions": {}}
    assert "steps" not in figures("ab", result, **given)
    nonlinear = replace(result, outer_steps=make_outer_steps())
    assert "steps" in figures("ab", nonlinear, **given)
