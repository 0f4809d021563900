"""A share as people read it."""

from __future__ import annotations


def percent(share: float) -> str:
    """A share in percent with two digits, or more where it is large.

    Examples
    --------
    >>> [percent(share) for share in (-0.0, 0.0144, 0.118, 1.0, 12.34)]
    ['0 %', '1.4 %', '12 %', '100 %', '1234 %']
    """
    number = 100 * share
    return f"{number:z.2g} %" if abs(number) < 99.5 else f"{number:.0f} %"
