from __future__ import annotations

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st

from monitor.series import MINUTE_US, bucket_width_us, envelope, runs

DAY_US = 1440 * MINUTE_US
YEAR = np.arange(525_600, dtype=np.int64) * MINUTE_US


def test_no_spike_is_lost_among_a_year_of_minutes():
    value = np.zeros(YEAR.size)
    value[[123_456, 400_001]] = [7.5, -3.25]
    short = envelope(YEAR, value, first_us=0, last_us=int(YEAR[-1]), most=800)
    assert short.high.max() == 7.5
    assert short.low.min() == -3.25
    assert short.middle.size <= 800


@settings(max_examples=60, deadline=None)
@given(
    st.lists(st.one_of(st.floats(-1e6, 1e6), st.just(float("nan"))), min_size=1, max_size=400),
    st.integers(2, 60),
)
def test_a_bucket_holds_least_mean_and_greatest_of_its_numbers(values: list[float], most: int):
    # Law: whatever the buckets, extremes and the count-weighted mean of the whole are kept.
    value = np.array(values)
    time = 37 * MINUTE_US + np.arange(value.size, dtype=np.int64) * 10 * MINUTE_US
    short = envelope(time, value, first_us=int(time[0]), last_us=int(time[-1]), most=most)
    there = np.isfinite(value)
    assert short.count.sum() == there.sum()
    if there.any():
        assert np.nanmin(short.low) == value[there].min()
        assert np.nanmax(short.high) == value[there].max()
        total = np.nansum(np.where(short.count > 0, short.mean, 0) * short.count)
        np.testing.assert_allclose(total, value[there].sum(), rtol=1e-9, atol=1e-6)


def test_a_hole_stays_a_hole():
    time = np.arange(2000, dtype=np.int64) * MINUTE_US
    value = np.where((time >= 500 * MINUTE_US) & (time < 700 * MINUTE_US), np.nan, 1.0)
    short = envelope(time, value, first_us=0, last_us=int(time[-1]), most=100)
    hole = (short.middle > 500 * MINUTE_US) & (short.middle < 700 * MINUTE_US)
    assert np.isnan(short.mean[hole]).all()
    assert np.isfinite(short.mean[~hole]).all()


def test_a_later_end_moves_no_bucket_that_was_there():
    value = np.sin(np.arange(YEAR.size) / 500.0)
    early = envelope(YEAR, value, first_us=0, last_us=300 * DAY_US, most=800)
    late = envelope(YEAR, value, first_us=0, last_us=300 * DAY_US + 60 * MINUTE_US, most=800)
    kept = early.middle.size - 1
    np.testing.assert_array_equal(early.middle, late.middle[: early.middle.size])
    np.testing.assert_array_equal(early.high[:kept], late.high[:kept])


def test_a_short_series_is_handed_on_point_by_point_and_the_input_is_left_alone():
    time, value = YEAR[:50].copy(), np.arange(50.0)
    short = envelope(time, value, first_us=0, last_us=int(time[-1]), most=50)
    short.low[:] = -1
    np.testing.assert_array_equal(value, np.arange(50.0))
    assert short.width_us == 0


def test_bucket_widths_are_ones_that_people_name():
    # By hand: 7 d in 800 buckets needs 12.6 min, the next named width is 15 min; ten years need 4.6 d -> 5 d.
    assert bucket_width_us(0, 7 * DAY_US, 800) == 15 * MINUTE_US
    assert bucket_width_us(0, 3650 * DAY_US, 800) == 5 * DAY_US


def test_a_hole_in_the_grid_ends_a_run():
    start = np.array([0, 10, 20, 50, 60], dtype=np.int64)
    begin, end = runs(start, np.array([True, True, False, True, True]), step_us=10)
    assert begin.tolist() == [0, 50]
    assert end.tolist() == [20, 70]
    begin, end = runs(np.array([0, 30], dtype=np.int64), np.array([True, True]), step_us=10)
    assert begin.tolist() == [0, 30]
    assert end.tolist() == [10, 40]
