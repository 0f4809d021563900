"""Ranks rules by what trusting them costs: a pure function of the ratios."""

from __future__ import annotations

import math
from collections.abc import Mapping

import numpy as np

from stillground.protocols import Array

_REGRET = 0.03


def rank(
    ratios: Mapping[str, Mapping[str, Array]],
) -> tuple[dict[str, float], tuple[tuple[str, ...], ...]]:
    """Costs of rules and groups of equals.

    Parameters
    ----------
    ratios : mapping of family to mapping of rule to array, shape (n_twins,)
        Error over the best iterate's.

    Returns
    -------
    cost : dict of rule to float
        Mean ratio less one in the worst family, of the rules that all families have: the cost of others
        would leave out where they do not even apply.
    groups : tuple of tuple of str
        Best first. A rule belongs to a group when its cost is within 0.03 of the group's best, or when the
        twins cannot tell them apart: their mean difference is within two of its standard errors in every
        family. One family would not do: a rule that seldom goes wrong badly has a large standard error.
    """
    first = next(iter(ratios.values()), {})
    rules = [rule for rule in first if all(rule in family for family in ratios.values())]
    excess = {rule: {name: family[rule] - 1 for name, family in ratios.items()} for rule in rules}
    worst = {rule: max(found, key=lambda name: float(np.mean(found[name]))) for rule, found in excess.items()}
    cost = {rule: float(np.mean(excess[rule][worst[rule]])) for rule in rules}
    waiting = sorted(rules, key=lambda rule: cost[rule])
    groups = []
    while waiting:
        best = waiting[0]
        equal = [rule for rule in waiting if _equal(best, rule, excess, cost)]
        groups.append(tuple(equal))
        waiting = [rule for rule in waiting if rule not in equal]
    return cost, tuple(groups)


def _equal(
    best: str, rule: str, excess: Mapping[str, Mapping[str, Array]], cost: Mapping[str, float]
) -> bool:
    if cost[rule] - cost[best] <= _REGRET:
        return True
    for family in excess[rule]:
        difference = excess[rule][family] - excess[best][family]
        error = float(np.std(difference)) / math.sqrt(difference.size)
        if float(np.mean(difference)) > 2 * error:
            return False
    return True
