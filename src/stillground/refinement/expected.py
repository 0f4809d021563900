"""The order at which answers on finer and finer grids should come together, from the theory alone."""

from __future__ import annotations

BASIS = 2.0
"""Order of the nodal functions: linear between nodes, exact for straight ground only."""

WITHOUT_WEIGHTS = (
    "the prior does not know the weights of the quadrature, so the answer depends on the rule and on the "
    "grid, whatever the changes do"
)
"""Why answers have no limit of their own on grids that are not ``weighted``."""


def expected_order(smoothness: float, regularity: float) -> float:
    """Order of the L2 change of the answer, at equal iteration, when the spacing is halved.

    Parameters
    ----------
    smoothness : float
        s of the prior covariance ``(I - div(l^2 grad))^(-s)``.
    regularity : float
        r, as in `stillground.protocols.Kind`.

    Returns
    -------
    float
        At most 2; 0 where there is no limit at all, which is where ``s <= -r``.

    Notes
    -----
    .. math::
        \\max(0, \\min(2,\\; 2 s + r + \\min(r, 0)))

    An iterate is a combination of representers ``C a``, the prior covariance applied to a functional a of
    regularity r. They are 2 s smoother, so functions linear between nodes meet them at order 2 s + r. The
    coefficients come from the products ``<a, C a'>``, whose error is of order 2 s + 2 r; for r < 0 that is
    the slower one, though it sits in the diagonal only, each datum with itself, and shows late: early
    iterations come closer to 2 s + r. Measured on line integrals in two dimensions (r = -1/2), for s = 0.5,
    0.75, 1, 1.25, 1.5, 2: representers 0.50, 1.00, 1.49, 1.87, 1.99, 2.00, diagonal 0.18 (falling), 0.53,
    0.99, 1.44, 1.77, 1.98; on integrals over intervals (r = 1/2), for s = 0, 0.25, 0.5, 0.75, 1, iterates:
    0.45, 0.97, 1.50, 1.95, 2.00.

    Examples
    --------
    Rays in a section on priors of smoothness 2, 1 and 0; intervals of a borehole on white:

    >>> [expected_order(s, -0.5) for s in (2, 1, 0)], expected_order(0, 0.5)
    ([2.0, 1.0, 0.0], 0.5)
    """
    return max(0.0, min(BASIS, 2 * smoothness + regularity + min(regularity, 0.0)))


def rough_limit(smoothness: float, regularity: float) -> str | None:
    """Why answers on this prior come together slowly or not at all, in a sentence; None where they do."""
    order = expected_order(smoothness, regularity)
    prior = "a white prior" if smoothness == 0 else f"a prior of smoothness {smoothness:g}"
    if order == 0:
        return (
            f"on {prior} a datum along a line or at a point is no bounded functional, so the answer has no "
            f"limit as the grid is refined"
        )
    if order < 1:
        limit = "a staircase" if smoothness == 0 else "rough"
        return (
            f"on {prior} the limit is {limit} and grids approach it at order {order:.2g} only: changes that "
            f"shrink by about a factor {2**order:.2g} a rung are its true order, not drift"
        )
    return None
