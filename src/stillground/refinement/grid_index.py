"""The grid convergence index of a number found on three grids: the published cross-check of a verdict."""

from __future__ import annotations

import math
from collections.abc import Sequence

from scipy.optimize import brentq

from stillground.protocols import GridIndex

SAFETY = 1.25
"""Factor of the index over the estimated error, for three grids or more."""


def grid_index(values: Sequence[float], spacings: Sequence[float], blur: float = 0.0) -> GridIndex:
    """Roache's grid convergence index of the finest of three grids, by the procedure of Celik et al.

    Parameters
    ----------
    values : sequence of float
        The number on each grid, coarse to fine; of more than three the last three count.
    spacings : sequence of float
        Of the same grids, falling; the ratios need not be equal.
    blur : float
        Differences of values up to this say nothing.

    Returns
    -------
    GridIndex
        Without numbers, and with the reason, where the values do not come together: fewer than three, no
        change, oscillation, changes that do not shrink.

    Notes
    -----
    With values f1, f2, f3 on spacings h1 < h2 < h3, r21 = h2 / h1 and r32 = h3 / h2, the order p solves

    .. math::
        \\frac{f_3 - f_2}{f_2 - f_1} = \\frac{r_{21}^p (r_{32}^p - 1)}{r_{21}^p - 1}.

    The paper writes the same equation as a fixed point; it is solved here by bracketing, since that fixed
    point need not attract where r32 > r21^2. Its right side grows with p from ``ln r32 / ln r21`` at 0:
    ratios below that mean changes that do not shrink, where the paper's absolute value would still give an
    order. Then, with the safety factor 1.25,

    .. math::
        f = \\frac{r_{21}^p f_1 - f_2}{r_{21}^p - 1}, \\quad
        e_a = \\left|\\frac{f_1 - f_2}{f_1}\\right|, \\quad
        e_{ext} = \\left|\\frac{f - f_1}{f}\\right|, \\quad GCI = \\frac{1.25\\, e_a}{r_{21}^p - 1}.

    References
    ----------
    Celik, Ghia, Roache, Freitas, Coleman & Raad (2008), Procedure for estimation and reporting of
    uncertainty due to discretization in CFD applications, J. Fluids Eng. 130, 078001. Roache (1994).

    Examples
    --------
    >>> found = grid_index((5.863, 5.972, 6.063), (2.0, 1.5, 1.0))
    >>> round(found.order, 2), round(found.extrapolated, 3), round(100 * found.index, 1)
    (1.53, 6.168, 2.2)
    """
    if len(values) < 3:
        return _untold(f"{len(values)} grid{'s' * (len(values) > 1)}, and it takes three")
    f3, f2, f1 = values[-3:]
    h3, h2, h1 = spacings[-3:]
    first, last = f2 - f3, f1 - f2
    if not math.isfinite(first) or not math.isfinite(last) or f1 == 0:
        return _untold("the value is not a finite number other than 0")
    if min(abs(first), abs(last)) <= blur:
        return _untold("its changes are at the floor of the iteration's own rounding")
    if first * last < 0:
        return _untold("it oscillates from grid to grid")
    r21, r32 = h2 / h1, h3 / h2
    ratio = first / last
    if ratio <= math.log(r32) / math.log(r21) * (1 + 1e-9):
        return _untold("its changes do not shrink from grid to grid")

    def excess(p: float) -> float:
        # r21^p over (r21^p - 1) in a form that neither cancels nor overflows.
        return math.expm1(p * math.log(r32)) / -math.expm1(-p * math.log(r21)) - ratio

    p = float(brentq(excess, 1e-12, math.log1p(ratio) / math.log(r32) + 1e-9))
    gain = math.expm1(p * math.log(r21))
    extrapolated = f1 + last / gain
    approximate = abs(last / f1)
    return GridIndex(
        index=SAFETY * approximate / gain,
        order=p,
        extrapolated=extrapolated,
        approximate_error=approximate,
        extrapolated_error=abs((extrapolated - f1) / extrapolated) if extrapolated else None,
        reason=None,
    )


def _untold(reason: str) -> GridIndex:
    return GridIndex(None, None, None, None, None, reason)
