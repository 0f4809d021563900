"""Laws of the cross-check: the published index where values come together, and a reason where not."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from stillground.refinement import grid_index

laws = settings(derandomize=True, deadline=None, max_examples=200)


def test_the_worked_example_of_the_procedure() -> None:
    """Outside source: Celik et al. (2008, J. Fluids Eng. 130, 078001), table 1, first column, from memory."""
    nodes = np.array([4500, 8000, 18000])
    found = grid_index((5.863, 5.972, 6.063), 1 / np.sqrt(nodes))
    assert found.reason is None
    assert found.order == pytest.approx(1.53, abs=0.005)
    assert found.extrapolated == pytest.approx(6.1685, abs=5e-4)
    assert found.approximate_error == pytest.approx(0.015, abs=5e-4)
    assert found.extrapolated_error == pytest.approx(0.017, abs=5e-4)
    assert found.index == pytest.approx(0.022, abs=5e-4)


def test_the_order_is_the_fixed_point_of_the_paper() -> None:
    """Outside source: its equations 3, from memory, iterated as printed."""
    r21, r32 = 1.5, 4 / 3
    p = 1.0
    for _ in range(200):
        q = math.log((r21**p - 1) / (r32**p - 1))
        p = abs(math.log(0.109 / 0.091) + q) / math.log(r21)
    assert grid_index((5.863, 5.972, 6.063), (2.0, 1.5, 1.0)).order == pytest.approx(p, rel=1e-9)


@laws
@given(
    order=st.floats(0.2, 4),
    r21=st.floats(1.2, 4),
    r32=st.floats(1.2, 8),
    slope=st.floats(0.01, 0.2) | st.floats(-0.2, -0.01),
)
def test_a_power_law_gives_back_its_order_and_its_limit(
    order: float, r21: float, r32: float, slope: float
) -> None:
    """Outside source: the closed form ``f + c h^p``; also for r32 > r21^2, where fixed points may repel."""
    spacings = np.array([r21 * r32, r21, 1.0])
    values = 3.0 + slope * spacings**order
    found = grid_index(values, spacings)
    assert found.order == pytest.approx(order, rel=1e-6)
    assert found.extrapolated == pytest.approx(3.0, rel=1e-6)
    assert found.index == pytest.approx(1.25 * abs(values[-1] - 3.0) / abs(values[-1]), rel=1e-5)


def test_the_last_three_of_more_grids_count() -> None:
    values, spacings = (9.0, 5.863, 5.972, 6.063), (4.0, 2.0, 1.5, 1.0)
    assert grid_index(values, spacings) == grid_index(values[1:], spacings[1:])


@pytest.mark.parametrize(
    ("values", "reason"),
    [
        ((1.0,), "1 grid, and it takes three"),
        ((1.0, 1.1), "2 grids, and it takes three"),
        ((1.0, 1.2, 1.1), "oscillates"),
        ((1.0, 1.1, 1.2), "do not shrink"),
        ((1.0, 1.1, 1.3), "do not shrink"),
        ((1.0, 1.0, 1.0), "rounding"),
        ((1.0, 1.1, 1.1), "rounding"),
        ((1.0, 1.1, 1.1 + 1e-9), "rounding"),
        ((1.0, 1.0 + 1e-9, 1.1), "rounding"),
        ((math.nan, 1.0, 1.1), "finite"),
        ((1.0, 0.5, 0.0), "other than 0"),
    ],
)
def test_what_it_cannot_tell_it_tells_why(values: tuple[float, ...], reason: str) -> None:
    found = grid_index(values, (4.0, 2.0, 1.0)[: len(values)], blur=1e-8)
    assert found.index is found.order is found.extrapolated is None
    assert found.reason is not None
    assert reason in found.reason
