"""Mann-Kendall's test and Theil-Sen's slope: published examples, hand arithmetic, laws."""

from __future__ import annotations

import json
import math

import numpy as np
import pytest

from monitor.trendtests import MOST, kendall_variance, rolling_slopes, trend
from tests.source import ROOT

EXAMPLES = {
    one["id"]: one
    for one in json.loads((ROOT / "tests/published/trend_tests.json").read_text(encoding="utf-8"))["examples"]
}


def series(example: str) -> tuple[np.ndarray, np.ndarray]:
    one = EXAMPLES[example]
    return np.array(one["t"], dtype=float), np.array(one["y"], dtype=float)


def test_the_groundwater_example_17_6_comes_out_exactly():
    # US EPA 530/R-09-007 (2009) example 17-6; digits as the file read tells. Three groups of ties.
    published, found = EXAMPLES["EPA2009_17-6"]["published"], trend(*series("EPA2009_17-6"))
    assert found is not None
    assert (found.total, found.variance) == (194.0, 1428.0)
    assert found.tau == pytest.approx(published["tau_a"], abs=5e-8)
    assert found.z == pytest.approx(published["z"], abs=5e-7)
    assert found.p == pytest.approx(published["p_two_sided"], rel=1e-6)
    assert found.slope == pytest.approx(published["slope"], abs=5e-8)
    assert found.intercept == pytest.approx(published["intercept"], abs=5e-8)
    assert found.low == pytest.approx(published["LCL95"], abs=1e-9)
    assert found.high == pytest.approx(published["UCL95"], abs=5e-6)


def test_the_groundwater_example_17_7_comes_out_as_worked_out_by_others():
    # the same guidance, example 17-7 (sodium): 1.33 a year
    worked, found = EXAMPLES["EPA2009_17-7"]["recomputed"], trend(*series("EPA2009_17-7"))
    assert found is not None
    told = (found.total, found.variance, found.z, found.p, found.slope, found.intercept)
    assert told == pytest.approx([worked[name] for name in ("S", "var_S", "z", "p", "slope", "intercept")])


def test_the_variance_counts_ties_as_hand_arithmetic_does():
    # n = 4: 4 * 3 * 13 / 18 = 8.667; one pair of equals takes 2 * 1 * 9 / 18 = 1 off; all equal leave none
    assert kendall_variance(np.array([1.0, 2, 3, 4])) == pytest.approx(4 * 3 * 13 / 18)
    assert kendall_variance(np.array([1.0, 2, 2, 4])) == pytest.approx(4 * 3 * 13 / 18 - 1)
    assert kendall_variance(np.ones(4)) == 0.0


def test_a_series_that_never_moves_has_no_trend():
    found = trend(np.arange(5.0), np.ones(5))
    assert found is not None
    assert (found.z, found.p, found.slope, found.low, found.high) == (0.0, 1.0, 0.0, 0.0, 0.0)


def test_missing_values_take_no_part_and_the_series_is_not_changed():
    time, value = series("EPA2009_17-6")
    holed = np.insert(value, 3, np.nan)
    kept = holed.copy()
    assert trend(np.insert(time, 3, (time[2] + time[3]) / 2), holed) == trend(time, value)
    np.testing.assert_array_equal(holed, kept)


def test_shifting_the_clock_shifts_the_intercept_alone_and_turning_the_series_turns_the_slope():
    time, value = series("EPA2009_17-7")
    found, shifted, turned = trend(time, value), trend(time + 10, value), trend(time, -value)
    assert found is not None
    assert shifted is not None
    assert turned is not None
    assert shifted.slope == pytest.approx(found.slope)
    assert shifted.intercept == pytest.approx(found.intercept - 10 * found.slope)
    assert (turned.slope, turned.z, turned.low) == pytest.approx((-found.slope, -found.z, -found.high))


def test_one_wild_value_does_not_move_the_slope():
    time = np.arange(21.0)
    value = 0.5 * time
    value[15] = 1e6
    found = trend(time, value)
    assert found is not None
    assert found.slope == pytest.approx(0.5)


def test_too_few_values_have_no_trend_and_a_few_bound_no_slope():
    assert trend(np.arange(3.0), np.array([1.0, np.nan, 2.0])) is None
    # three values: C = 1.96 * sqrt(3 * 2 * 11 / 18) = 3.75, more than their three pairs
    found = trend(np.arange(3.0), np.array([1.0, 2.0, 4.0]))
    assert found is not None
    assert (found.low, found.high) == (-math.inf, math.inf)


def test_times_that_do_not_ascend_are_refused():
    with pytest.raises(ValueError, match=f"times have to ascend, and at most {MOST} values"):
        trend(np.array([1.0, 1.0, 2.0]), np.arange(3.0))


def wandering(phi: float, count: int, runs: int) -> np.ndarray:
    """First-order autoregressions without a trend, of unit standard deviation."""
    rng = np.random.default_rng(3)
    value = np.empty((count, runs))
    value[0] = rng.standard_normal(runs)
    for row in range(1, count):
        value[row] = phi * value[row - 1] + math.sqrt(1 - phi**2) * rng.standard_normal(runs)
    return value.T


def test_allowance_for_autocorrelation_keeps_the_false_trends_at_their_level():
    # A law: 5 % of series without a trend are called one at the 5 % level. Without the allowance an
    # autoregression of 0.6 gives many times that; a tolerance of four standard errors of 400 series.
    time, runs = np.arange(120.0), wandering(0.6, 120, 400)
    plain = np.array([trend(time, one).p for one in runs])  # type: ignore[union-attr]
    allowed = np.array([trend(time, one, inflation=1.6 / 0.4).p for one in runs])  # type: ignore[union-attr]
    assert (plain < 0.05).mean() > 0.25
    assert (allowed < 0.05).mean() < 0.05 + 4 * math.sqrt(0.05 * 0.95 / 400)


def test_the_interval_of_the_slope_holds_the_truth_as_often_as_it_says():
    rng = np.random.default_rng(8)
    time = np.arange(30.0)
    found = [trend(time, 0.1 * time + rng.standard_normal(30)) for _ in range(400)]
    held = np.mean([one.low <= 0.1 <= one.high for one in found if one is not None])
    assert 0.95 - 4 * math.sqrt(0.05 * 0.95 / 400) < held < 0.995


def test_rolling_slopes_are_those_of_each_window_by_itself():
    value = np.random.default_rng(4).standard_normal(60)
    value[[5, 6, 30]] = np.nan
    slope, z = rolling_slopes(value, 20, least=15)
    assert np.isnan(slope[:19]).all()
    for row in (19, 25, 40, 59):
        found = trend(np.arange(20.0), value[row - 19 : row + 1])
        assert found is not None
        assert (slope[row], z[row]) == pytest.approx((found.slope, found.z))


def test_a_window_with_too_few_values_has_no_slope():
    value = np.arange(30.0)
    value[10:20] = np.nan
    slope, _ = rolling_slopes(value, 20, least=15)
    assert np.isnan(slope[19:]).all()
    assert np.isnan(rolling_slopes(value[:10], 20, least=15)[0]).all()
