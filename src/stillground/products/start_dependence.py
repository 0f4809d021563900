"""How far other starts move the answer of a nonlinear measurement, in words."""

from __future__ import annotations

from collections.abc import Mapping

from stillground.percent import percent


def start_sentence(moved: Mapping[str, float]) -> str:
    """What `Result.start_dependence` says, for terminal and page; nothing where there is none.

    Examples
    --------
    >>> start_sentence({"a quarter slower": 0.148, "half as steep": 2.06})
    'from another start the answer moves by 15 % (a quarter slower), 206 % (half as steep); on a coarse grid'
    >>> start_sentence({})
    ''
    """
    told = ", ".join(f"{percent(part)} ({name})" for name, part in moved.items())
    return told and f"from another start the answer moves by {told}; on a coarse grid"
