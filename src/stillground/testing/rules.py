"""The laws of a stopping rule."""

from __future__ import annotations

import copy

import numpy as np

from stillground.progress import finish
from stillground.protocols import History, Pick, Rule, RuleOptions
from stillground.solve import iterate
from stillground.solve.lsqr import lsqr
from stillground.testing.problem import small_problem


def check_rule(rule: Rule) -> None:
    """Proves a rule against its contract on the history of a small problem and on all its prefixes.

    It is pure: the history is left as it was, and the same one gives the same pick. A pick lies within
    the history; it has one sentence of reason; a history without optional columns is no error; that the
    rule does not apply is told by `Pick.does_not_apply`, so that a rehearsal leaves it out.

    Raises
    ------
    AssertionError
        With the law that was broken.
    """
    operator, b = small_problem()
    (run,) = finish(iterate(lsqr, operator, b[:, None], 20))
    options = RuleOptions()
    before = copy.deepcopy(run.history)
    first, second = rule(run.history, options), rule(run.history, options)
    assert first == second, "the same history gives the same pick"
    for name in History.__dataclass_fields__:
        was, now = getattr(before, name), getattr(run.history, name)
        pairs = [(was[k], now[k]) for k in was] if name == "whiteness" else [(was, now)]
        same = all(np.array_equal(one, other) for one, other in pairs)
        assert same, f"the history is left as it was ({name})"
    for last in range(run.history.last + 1):
        history = run.history.upto(last)
        pick = rule(history, options)
        inside = pick.iteration is None or 0 <= pick.iteration <= last
        assert inside, f"a pick lies within the history (last iteration {last}, pick {pick.iteration})"
        _check_words(pick)
    h = run.history
    bare = History(h.n_data, h.residual_norm, h.residual_step, h.solution_norm, h.step_norm)
    _check_words(rule(bare, options))


def _check_words(pick: Pick) -> None:
    assert pick.reason, "a pick has a reason"
    assert "\n" not in pick.reason, "the reason is one sentence"
    assert pick.applies or pick.iteration is None, "a rule that does not apply picks nothing"
    told = pick.reason.startswith("does not apply")
    assert told != pick.applies, "that a rule does not apply is told by Pick.does_not_apply"
