"""Units in words and labels: raised powers, no break within a unit, and no unit at all for pure numbers."""

from __future__ import annotations

import re

_NONE = ("", "1")


def unit_text(units: str) -> str:
    """UDUNITS text as people write it, in one piece; nothing for pure numbers.

    Examples
    --------
    >>> unit_text("m s-1").split("\\N{NO-BREAK SPACE}")
    ['m', 's⁻¹']
    >>> unit_text("1")
    ''
    """
    if units in _NONE:
        return ""
    raised = str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹")
    text = re.sub(r"(?<=[A-Za-z])-?\d+", lambda power: power.group().translate(raised), units)
    return text.replace(" ", "\N{NO-BREAK SPACE}")


def with_unit(number: str, units: str) -> str:
    """A number and its unit, as the unit is given.

    Examples
    --------
    >>> with_unit("1414", "m s-1"), with_unit("0.27", "1")
    ('1414 m s-1', '0.27')
    """
    return number if units in _NONE else f"{number} {units}"


def labelled(name: str, units: str) -> str:
    """What an axis shows, with its unit in brackets.

    Examples
    --------
    >>> labelled("noise level", "1"), labelled("depth", "m")
    ('noise level', 'depth (m)')
    """
    return name if units in _NONE else f"{name} ({unit_text(units)})"
