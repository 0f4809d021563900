"""A number of things as people read it."""

from __future__ import annotations


def counted(number: int, one: str, many: str) -> str:
    """A number with the words that go with one, or with none and several.

    Examples
    --------
    >>> [counted(n, "row is", "rows are") for n in (0, 1, 2)]
    ['0 rows are', '1 row is', '2 rows are']
    """
    return f"{number} {one if number == 1 else many}"
