"""How a series wanders: laws of first-order autoregressions, and gaps."""

from __future__ import annotations

import numpy as np
import pytest

from monitor.noise import SLOWEST, Noise, noise_of
from tests.drift_made import HOUR_US, remembered


def ends(count: int) -> np.ndarray:
    return (np.arange(count) + 1) * HOUR_US


def test_the_long_run_of_an_autoregression_is_wider_by_the_root_of_one_plus_over_one_minus_phi():
    # 0.8: sqrt(1.8 / 0.2) = 3
    assert Noise(0.5, 0.8).long_run_sd == pytest.approx(1.5)
    assert Noise(0.5, 0.0).long_run_sd == 0.5


@pytest.mark.parametrize("phi", [0.0, 0.5, 0.78])
def test_spread_and_memory_of_a_made_series_come_back(phi: float):
    # a law; 20,000 values tell phi to about 0.01 and the spread to 2 %
    rng = np.random.default_rng(2)
    hours = -1 / np.log(phi) if phi else 1e-6
    found = noise_of(ends(20_000), 0.3 * remembered(rng, (20_000,), hours=hours), HOUR_US)
    assert found.sd == pytest.approx(0.3, rel=0.05)
    assert found.phi == pytest.approx(phi, abs=0.05)


def test_a_slow_wander_under_white_noise_is_not_overlooked():
    # a law: the long run of the sum is white 0.3 and wander 0.1 * sqrt((1 + k) / (1 - k)), k = exp(-1 / 8);
    # the neighbours alone would tell 0.33 instead of 0.50. Bartlett's weights see most of it.
    rng = np.random.default_rng(3)
    value = 0.3 * rng.standard_normal(20_000) + 0.1 * remembered(rng, (20_000,), hours=8.0)
    keep = np.exp(-1 / 8)
    true = np.hypot(0.3, 0.1 * np.sqrt((1 + keep) / (1 - keep)))
    assert 0.85 * true < noise_of(ends(20_000), value, HOUR_US).long_run_sd < 1.1 * true


def test_what_stands_beside_a_gap_is_no_neighbour():
    # values alternate within each stretch: neighbours are opposite, and the gap joins two that are equal
    value = np.array([1.0, -1.0, 1.0, 1.0, -1.0, 1.0, 1.0, -1.0, 1.0])
    end = np.array([1, 2, 3, 10, 11, 12, 30, 31, 32]) * HOUR_US
    assert noise_of(end, value, HOUR_US).phi == 0.0
    assert noise_of(end, np.ones(9), HOUR_US) == Noise(0.0, 0.0)


def test_what_only_rises_is_no_noise_and_the_memory_stays_below_one():
    assert noise_of(ends(1000), np.arange(1000.0), HOUR_US).phi == SLOWEST
