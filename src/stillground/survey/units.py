"""The one unit registry: from what people write to SI numbers."""

from __future__ import annotations

import math
import re
from functools import lru_cache
from typing import Any, Final, overload

import pint

from stillground.protocols import Array


def _powers(text: str) -> str:
    """UDUNITS writes powers without a sign, ``S m-1``; pint wants ``S m**-1``."""
    return re.sub(r"(?<=[^\W\d_])(-?\d+)\b", r"**\1", text)


registry: Final[pint.UnitRegistry[Any]] = pint.UnitRegistry(preprocessors=[_powers])
registry.define("@alias survey_foot = US_survey_foot")

_QUANTITY = re.compile(r"([+-]?(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d+)?)(.*)", re.DOTALL)


def _unit(text: str) -> pint.Unit:
    # What pint raises for a unit that it cannot read has no common base: tokenizer errors,
    # attribute errors, type errors from operands.
    try:
        return registry.parse_units(text)
    except Exception as error:
        raise ValueError(f"unknown unit '{text}'") from error


def _written(si: str) -> str:
    return f"{_unit(si):~C}"


@lru_cache(maxsize=256)
def _factor(unit: str, si: str) -> float:
    try:
        return float(registry.Quantity(1.0, _unit(unit)).m_as(_unit(si)))
    except pint.DimensionalityError as error:
        raise ValueError(f"unit '{unit}' does not convert to {_written(si)}") from error


@overload
def to_si(value: float, unit: str, si: str) -> float: ...
@overload
def to_si(value: Array, unit: str, si: str) -> Array: ...
def to_si(value: float | Array, unit: str, si: str) -> float | Array:
    """Convert numbers to an SI unit.

    Parameters
    ----------
    value : float or array
    unit : str
        The unit of ``value``, as people write it (``ms``, ``mS/m``) or as UDUNITS text (``S m-1``).
        Units with an offset, such as degrees Celsius, have no place here.
    si : str
        The unit wanted, UDUNITS text.

    Raises
    ------
    ValueError
        When the unit is unknown or measures something else.

    Examples
    --------
    >>> to_si(250.0, "cm", "m")
    2.5
    >>> to_si(1.0, "m", "s")
    Traceback (most recent call last):
    ValueError: unit 'm' does not convert to s
    """
    return value * _factor(unit, si)


def quantity(text: object, si: str | tuple[str, ...]) -> float:
    """Read a number with its unit, as configurations give it.

    Parameters
    ----------
    text : str
        Such as ``"0.25 m"``. Anything else, a bare number above all, is refused, unless the unit is 1.
    si : str or tuple of str
        The unit wanted, UDUNITS text. Of several, the first is what comes back; a quantity in one
        of the others is turned over (a velocity where a slowness is wanted).

    Raises
    ------
    ValueError
        When there is no number, no unit or an unfitting one; it says what would be right.

    Examples
    --------
    >>> quantity("25 cm", "m")
    0.25
    >>> quantity("2000 m/s", ("s m-1", "m s-1"))
    0.0005
    >>> quantity(0.25, "m")
    Traceback (most recent call last):
    ValueError: 0.25 has no unit; give it with one, like '0.25 m'
    """
    accepted = (si,) if isinstance(si, str) else si
    units = " or ".join(_written(each) or "1" for each in accepted)
    match = _QUANTITY.fullmatch(str(text).strip())
    if match is None or not math.isfinite(float(match[1])):
        example = f"0.25 {_written(accepted[-1])}"
        raise ValueError(f"'{text}' is no number with a unit; write it like '{example}'")
    number, unit = float(match[1]), match[2].strip()
    if not unit and units == "1":
        return number
    if not unit:
        example = f"{match[1]} {_written(accepted[-1])}"
        raise ValueError(f"{text} has no unit; give it with one, like '{example}'")
    try:
        given = registry.Quantity(number, _unit(unit))
    except ValueError as error:
        raise ValueError(f"'{text}': {error}; it must convert to {units}") from error
    wanted = _unit(accepted[0])
    if given.is_compatible_with(wanted):
        return float(given.m_as(wanted))
    for other in accepted[1:]:
        if given.is_compatible_with(_unit(other)):
            if number == 0:
                raise ValueError(f"'{text}' must not be zero: its reciprocal is used")
            return float((1 / given).m_as(wanted))
    raise ValueError(f"'{text}': unit '{unit}' does not convert to {units}")
