"""White noise looks white along any grouping, and what varies slowly along one does not."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
import pytest

from stillground.protocols import Integers
from stillground.solve.whiteness import Periodogram
from stillground.stopping.whiteness import WHITE

N_SOURCES, N_RECEIVERS = 20, 25
SOURCE, RECEIVER = (g.ravel() for g in np.divmod(np.arange(N_SOURCES * N_RECEIVERS), N_RECEIVERS))
GROUPINGS: Mapping[str, Integers] = {"source": SOURCE, "receiver": RECEIVER}


@pytest.mark.parametrize("lost", [0.0, 0.3])
def test_white_noise_stays_under_the_limit_in_about_95_percent(lost: float) -> None:
    # Kolmogorov & Smirnov: sqrt(n) D passes 1.358 in 5 % of cases (many values; in
    # spectra of 9 and 12 waves the largest distance is looked for at few places, so a little less often).
    random = np.random.default_rng(11)
    kept = np.sort(random.permutation(SOURCE.size)[: round(SOURCE.size * (1 - lost))])
    told = Periodogram({name: group[kept] for name, group in GROUPINGS.items()})(
        random.standard_normal((kept.size, 2000))
    )
    for name, distance in told.items():
        assert 0.94 < float(np.mean(distance < WHITE)) < 0.99, name


def test_a_wave_along_the_receivers_is_seen_along_them() -> None:
    noise = np.random.default_rng(3).standard_normal(SOURCE.size)
    wave = 1.5 * np.sin(2 * np.pi * RECEIVER / N_RECEIVERS + SOURCE)
    told = Periodogram(GROUPINGS)((noise + wave)[:, None])
    assert told["source"][0] > 4 * WHITE


def test_a_wave_along_the_sources_is_seen_along_them() -> None:
    noise = np.random.default_rng(3).standard_normal(SOURCE.size)
    wave = 1.5 * np.sin(2 * np.pi * SOURCE / N_SOURCES + RECEIVER)
    told = Periodogram(GROUPINGS)((noise + wave)[:, None])
    assert told["receiver"][0] > 4 * WHITE


def test_the_distance_is_that_of_the_published_periodogram() -> None:
    # Hansen, Kilmer & Kjeldsen (2006), one group: c_j = (p_2 + ... + p_j+1) / (p_2 + ... + p_q+1) from the
    # squared Fourier coefficients, against j / q; for 9 values q = 4.
    r = np.array([1.0, 3.0, -2.0, 0.5, 4.0, -1.0, 2.0, 0.0, 1.5])
    waves = np.exp(-2j * np.pi * np.outer(np.arange(9), np.arange(9)) / 9)
    power = np.abs(waves @ r)[1:5] ** 2
    gap = np.abs(np.cumsum(power) / power.sum() - np.arange(1, 5) / 4).max()
    told = Periodogram({"line": np.zeros(9, dtype=np.int64)})(r[:, None])
    assert told["line"][0] == pytest.approx(2 * gap, rel=1e-12)


def test_scale_and_the_order_of_the_table_do_not_matter() -> None:
    random = np.random.default_rng(5)
    r = random.standard_normal((SOURCE.size, 3))
    told = Periodogram(GROUPINGS)(r)
    order = random.permutation(SOURCE.size)
    shuffled = Periodogram({name: group[order] for name, group in GROUPINGS.items()})(-7e-5 * r[order])
    for name in GROUPINGS:
        np.testing.assert_allclose(shuffled[name], told[name], rtol=1e-12)


def test_columns_are_told_one_by_one() -> None:
    r = np.random.default_rng(5).standard_normal((SOURCE.size, 3))
    told = Periodogram(GROUPINGS)(r)
    for j in range(3):
        assert Periodogram(GROUPINGS)(r[:, j : j + 1])["source"][0] == pytest.approx(told["source"][j])


def test_groups_of_fewer_than_four_are_left_out() -> None:
    told = Periodogram({"pair": np.arange(12) // 2, "line": np.zeros(12, dtype=np.int64)})
    assert set(told(np.ones((12, 1)))) == {"line"}


def test_a_residual_of_zeros_is_no_error() -> None:
    assert np.isfinite(Periodogram(GROUPINGS)(np.zeros((SOURCE.size, 1)))["source"]).all()
