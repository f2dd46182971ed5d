"""Limit watches: when an episode is raised, cleared, suppressed, and what it says of itself."""

from __future__ import annotations

import time
from dataclasses import replace
from datetime import timedelta

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st

from ingest.errors import OutletError
from ingest.unit import Watch
from monitor.drift import EPISODE_COLUMNS, limit_episodes, unit_episodes
from monitor.figures import figures_of
from monitor.windows import window_figures
from tests.amounts_made import DOWN, NOT_KNOWN, RUNNING, STARTING, TURNED_DOWN, made_amounts, reaction
from tests.units_made import HOUR, MIDNIGHT, MINUTE

STEP = 10 * MINUTE
GONE = np.nan


def _watch(*, low=76.0, high=None, deadband=0.3, on=60, off=120, steady=False) -> Watch:
    return Watch(
        name="yield low",
        figure="yield on feed",
        window=timedelta(hours=8),
        low=low,
        high=high,
        priority="high",
        deadband=deadband,
        on_delay=timedelta(minutes=on),
        off_delay=timedelta(minutes=off),
        steady=steady,
    )


def _episodes(watch, value, operating=RUNNING, half_width=0.1) -> pd.DataFrame:
    """Episodes of values every 10 min, the first at midnight."""
    value = np.asarray(value, dtype=float)
    return limit_episodes(
        watch,
        MIDNIGHT + np.arange(len(value)) * STEP,
        value,
        np.broadcast_to(np.asarray(half_width, dtype=float), len(value)),
        np.broadcast_to(np.asarray(operating, dtype=np.int8), len(value)),
    )


def _minutes(times) -> list[float]:
    """Minutes after midnight; NaN for NaT."""
    return ((times - pd.Timestamp(MIDNIGHT, unit="us", tz="UTC")) / pd.Timedelta(minutes=1)).tolist()


# Terms: ANSI/ISA-18.2-2016 / IEC 62682:2014 (state diagram quoted in an open teaching text; the standards not
# seen): a condition becomes an alarm after the on-delay and returns to normal after the off-delay.


def test_an_episode_is_raised_when_the_figure_has_been_beyond_for_the_on_delay():
    # Beyond from minute 30; an hour later is minute 90.
    found = _episodes(_watch(), [77.0] * 3 + [75.0] * 10)
    assert _minutes(found["first_crossed"]) == [30]
    assert _minutes(found["raised"]) == [90]
    assert found["cleared"].isna().all()


def test_one_value_back_at_the_limit_begins_the_on_delay_anew():
    value = [75.0] * 6 + [76.0] + [75.0] * 7
    assert _minutes(_episodes(_watch(), value)["raised"]) == [130]
    assert _episodes(_watch(), value[:-1]).empty


def test_without_delays_the_first_value_beyond_raises_and_the_first_inside_clears():
    found = _episodes(_watch(on=0, off=0, deadband=0.0), [77, 75, 76, 75, 77])
    assert _minutes(found["raised"]) == [10, 30]
    assert _minutes(found["cleared"]) == [20, 40]


def test_an_episode_clears_when_the_figure_has_been_inside_by_the_deadband_for_the_off_delay():
    # Raised at 0 (no on-delay). 76.2 is inside the limit but not by the deadband; 76.3 is.
    value = [75.0] + [76.2] * 30 + [76.3] * 13
    found = _episodes(_watch(on=0), value)
    assert _minutes(found["cleared"]) == [310 + 120]
    assert _episodes(_watch(on=0), value[:-1])["cleared"].isna().all()


def test_one_value_within_the_deadband_begins_the_off_delay_anew():
    value = [75.0] + [77.0] * 12 + [76.1] + [77.0] * 13
    assert _minutes(_episodes(_watch(on=0), value)["cleared"]) == [140 + 120]


def test_missing_values_neither_raise_nor_clear_and_count_for_no_delay():
    # Beyond at 0, 10, 20; missing to 100; beyond from 110. Seen time beyond: 20 min, then 0, 10, ... after
    # the gap; an hour is reached 40 min after minute 110.
    value = [75.0] * 3 + [GONE] * 8 + [75.0] * 8
    assert _minutes(_episodes(_watch(), value)["raised"]) == [150]
    assert _episodes(_watch(), [77.0] + [75.0] * 3 + [GONE] * 100).empty
    still = _episodes(_watch(on=0), [75.0] + [77.0] * 5 + [GONE] * 100)
    assert still["cleared"].isna().all()


def test_a_whole_history_of_missing_values_has_no_episode():
    assert _episodes(_watch(), [GONE] * 10).empty
    assert _episodes(_watch(), []).empty


def test_low_and_high_are_watched_apart_and_in_the_order_of_time():
    found = _episodes(_watch(low=97.0, high=103.0, on=0, off=0), [104, 100, 96, 100, 105])
    assert found["side"].tolist() == ["high", "low", "high"]
    assert found["limit"].tolist() == [103.0, 97.0, 103.0]
    assert found["worst"].tolist() == [104.0, 96.0, 105.0]


def test_a_jump_from_one_side_to_the_other_clears_the_one_and_raises_the_other():
    found = _episodes(_watch(low=97.0, high=103.0, on=0, off=0), [104, 96, 96])
    assert _minutes(found["raised"]) == [0, 10]
    assert _minutes(found["cleared"])[0] == 10


def test_the_worst_value_is_since_the_first_crossing():
    # 70 comes during the on-delay.
    found = _episodes(_watch(on=20, off=0), [75, 70, 74, 73, 77, 60])
    assert found["worst"].tolist() == [70.0]
    assert _minutes(found["worst_at"]) == [10]


def test_how_sure_is_the_share_of_time_with_the_whole_interval_beyond():
    # Limit 76, half-width 1: 74.9 is wholly below, 75.5 is not; two of four.
    found = _episodes(_watch(on=0, off=0), [75.5, 74.9, 74.9, 75.5, 77.0], half_width=1.0)
    assert found["sure"].tolist() == [0.5]
    unknown = _episodes(_watch(on=0), [70.0], half_width=GONE)
    assert unknown["sure"].tolist() == [0.0]


@pytest.mark.parametrize("condition", [DOWN, STARTING, TURNED_DOWN])
def test_an_episode_while_not_running_is_there_and_says_that_it_is_suppressed(condition):
    found = _episodes(_watch(on=0, off=0), [77] + [75] * 6 + [77], operating=condition)
    assert found["suppressed"].tolist() == [True]
    assert found["announced"].isna().all()
    assert found["suppressed_h"].tolist() == [1.0]


def test_an_episode_that_outlasts_the_start_up_is_announced_when_the_unit_runs():
    operating = np.repeat([STARTING, RUNNING], [5, 4])
    found = _episodes(_watch(on=0, off=0), [77] + [75] * 7 + [77], operating=operating)
    assert _minutes(found["raised"]) == [10]
    assert _minutes(found["announced"]) == [50]
    assert found["suppressed_h"].iloc[0] == pytest.approx(4 / 6)
    assert not found["suppressed"].iloc[0]


@pytest.mark.parametrize("condition", [RUNNING, NOT_KNOWN])
def test_running_or_not_known_suppresses_nothing(condition):
    found = _episodes(_watch(on=0), [75, 75], operating=condition)
    assert found["suppressed"].tolist() == [False]
    assert (found["announced"] == found["raised"]).all()
    assert found["suppressed_h"].tolist() == [0.0]


def _counted(count: int, among: int) -> Watch:
    return replace(_watch(on=0, off=0, deadband=0.0), window=timedelta(minutes=20), count=count, among=among)


def test_so_many_of_the_last_windows_that_do_not_overlap_have_to_lie_beyond_the_limit():
    # Windows of 20 min and rows of 10: the windows before one end 20 and 40 min earlier. By hand: below 76 at
    # minutes 20, 40 and 50; the first row with two of three such windows below is minute 40, and at minute 60
    # those of minutes 40 and 20 still are; at minute 80 only that of minute 40 is.
    value = [77, 77, 75, 77, 75, 75, 77, 77, 77, 77]
    found = _episodes(_counted(2, 3), value)
    assert _minutes(found["raised"]) == [40, 60]
    assert _minutes(found["cleared"]) == [50, 70]
    assert found["worst"].tolist() == [75.0, 75.0]


def test_one_of_one_is_a_plain_limit_and_all_of_three_a_longer_wait():
    value = [77, 75, 75, 77, 75, 75, 75, 75, 75, 75]
    assert _minutes(_episodes(_counted(1, 1), value)["raised"]) == [10, 40]
    # by hand: those of minutes 20, 40 and 60 all lie below, of 30, 50 and 70 not all, of 40, 60 and 80 all
    found = _episodes(_counted(3, 3), value)
    assert _minutes(found["raised"]) == [60, 80]
    assert _minutes(found["cleared"])[0] == 70


def test_a_window_that_is_missing_is_not_beyond_and_too_few_known_ones_tell_nothing():
    value = [75, GONE, GONE, GONE, 75, 75]
    assert _episodes(_counted(2, 2), value).empty
    assert _minutes(_episodes(_counted(2, 3), [*value, 75])["raised"]) == [40]


def test_an_episode_carries_what_the_watch_says():
    one = _episodes(_watch(on=0), [75.0]).iloc[0]
    assert tuple(one.index) == EPISODE_COLUMNS
    assert (one["watch"], one["figure"], one["priority"]) == ("yield low", "yield on feed", "high")
    assert one["window"] == timedelta(hours=8)


def test_the_table_has_the_same_columns_and_kinds_with_and_without_episodes():
    some, none = _episodes(_watch(on=0), [75.0]), _episodes(_watch(on=0), [77.0])
    pd.testing.assert_series_equal(some.dtypes, none.dtypes)


def test_a_hole_in_the_rows_counts_as_missing_time():
    end_us = MIDNIGHT + np.array([0, 1, 2, 50, 51, 52, 53, 54]) * STEP
    count = len(end_us)
    found = limit_episodes(
        _watch(), end_us, np.full(count, 75.0), np.zeros(count), np.zeros(count, dtype=np.int8)
    )
    assert _minutes(found["raised"]) == [540]


VALUES = st.lists(st.sampled_from([75.0, 75.9, 76.0, 76.2, 76.4, 77.0, GONE]), min_size=1, max_size=80)


def _by_hand(watch, value):
    """The same as a plain state machine, row by row: (raised, cleared or None)."""
    active, found = False, []
    since = {"beyond": None, "inside": None}
    clock, last = 0, None
    for i, v in enumerate(value):
        if np.isnan(v):
            continue
        clock += 10 if last is not None and i - last == 1 else 0
        last = i
        for name, holds in (("beyond", v < watch.low), ("inside", v >= watch.low + watch.deadband)):
            since[name] = (clock if since[name] is None else since[name]) if holds else None
        if not active and since["beyond"] is not None and clock - since["beyond"] >= 30:
            active, found = True, [*found, [i, None]]
        elif active and since["inside"] is not None and clock - since["inside"] >= 20:
            active, found[-1][1] = False, i
    return [tuple(one) for one in found]


@given(VALUES)
def test_the_arrays_do_what_a_state_machine_does_row_by_row(value):
    watch = _watch(on=30, off=20)
    found = _episodes(watch, value)
    told = [
        (round(r / 10), None if np.isnan(c) else round(c / 10))
        for r, c in zip(_minutes(found["raised"]), _minutes(found["cleared"]), strict=True)
    ]
    assert told == _by_hand(watch, value)


@given(VALUES, st.integers(1, 80))
def test_what_is_known_at_a_time_depends_on_nothing_later(value, cut):
    watch = _watch(on=30, off=20)
    whole, early = _episodes(watch, value), _episodes(watch, value[:cut])
    now = pd.Timestamp(MIDNIGHT + (min(cut, len(value)) - 1) * STEP, unit="us", tz="UTC")
    known = whole[whole["raised"] <= now]
    assert early["raised"].tolist() == known["raised"].tolist()
    closed = known["cleared"] <= now
    pd.testing.assert_frame_equal(early[closed], known[closed])
    assert early["cleared"][~closed].isna().all()


@given(VALUES, st.integers(-500, 500))
def test_shifting_the_clock_shifts_the_episodes_and_nothing_else(value, hours):
    value = np.array(value)
    end_us = MIDNIGHT + np.arange(len(value)) * STEP
    rest = (value, np.zeros(len(value)), np.zeros(len(value), dtype=np.int8))
    before = limit_episodes(_watch(on=10, off=10), end_us, *rest)
    after = limit_episodes(_watch(on=10, off=10), end_us + hours * HOUR, *rest)
    for name in ("first_crossed", "raised", "cleared", "announced", "worst_at"):
        after[name] -= pd.Timedelta(hours=hours)
    pd.testing.assert_frame_equal(before, after, check_dtype=False)


def test_turning_the_signs_makes_a_low_watch_a_high_one():
    value = 76 + np.repeat(np.random.default_rng(5).standard_normal(60), 10)
    low = _episodes(_watch(on=20, off=30), value)
    high = _episodes(_watch(low=None, high=-76.0, on=20, off=30), -value)
    assert len(low) > 2
    for name in ("raised", "cleared", "sure", "worst_at"):
        pd.testing.assert_series_equal(low[name], high[name])
    assert low["worst"].tolist() == (-high["worst"]).tolist()


def _unit(*watches):
    return reaction("C2H6", "C2H4", ["CH4"], windows=(timedelta(hours=8),), watches=watches)


def _fallen(unit):
    """Two days of yield 40 %, then one of 30 %."""
    made = np.repeat([4.0, 3.0], [288, 144])
    amounts = made_amounts(unit, {"fed C2H6": 10.0, "consumed C2H6": 5.0, "made C2H4": made}, 432)
    return window_figures(unit, amounts, figures_of(unit, amounts.names)), amounts.operating


@pytest.mark.parametrize("steady", [False, True])
def test_a_fall_in_yield_is_raised_through_real_windows(steady):
    # The 8-h yield (48 cells) falls by 10/48 a cell from 40: below 38 after 10 cells, raised 60 min later;
    # the fall began at hour 48.
    unit = _unit(_watch(low=38.0, steady=steady))
    frames, operating = _fallen(unit)
    found = unit_episodes(unit, frames, operating)
    assert _minutes(found["first_crossed"]) == [48 * 60 + 10 * 10]
    assert _minutes(found["raised"]) == [48 * 60 + 160]
    assert found["worst"].iloc[0] == pytest.approx(30.0)


def test_a_watch_on_what_the_unit_has_not_says_what_there_is():
    unit = _unit(_watch())
    frames, operating = _fallen(unit)
    wrong = _unit(
        Watch("w", "yeild", timedelta(hours=8), 1.0, None, "low", 0.0, timedelta(0), timedelta(0), False)
    )
    with pytest.raises(OutletError, match=r"(?s)watch 'w': the unit has no figure 'yeild'.*yield on feed"):
        unit_episodes(wrong, frames, operating)
    other = _unit(
        Watch("w", "conversion", timedelta(hours=1), 1.0, None, "low", 0.0, timedelta(0), timedelta(0), False)
    )
    with pytest.raises(OutletError, match=r"(?s)no window of 1:00:00.*8:00:00"):
        unit_episodes(other, frames, operating)


def test_rows_that_do_not_belong_together_are_refused():
    unit = _unit(_watch())
    frames, operating = _fallen(unit)
    with pytest.raises(ValueError, match="432 ends, 432 values, 431 operating conditions"):
        unit_episodes(unit, frames, operating[1:])


def test_no_watches_give_no_episodes():
    unit = _unit()
    assert tuple(unit_episodes(unit, *_fallen(unit)).columns) == EPISODE_COLUMNS


def test_ten_years_of_ten_minute_cells_take_a_blink():
    # 525,600 rows; the aim is 50 ms of processor time, here held to four times that on a shared machine.
    rng = np.random.default_rng(1)
    value = 77 + np.repeat(rng.standard_normal(525_600 // 60 + 1), 60)[:525_600]
    operating = np.zeros(len(value), dtype=np.int8)
    begun = time.process_time()
    found = limit_episodes(
        _watch(), MIDNIGHT + np.arange(len(value)) * STEP, value, np.full(len(value), 0.2), operating
    )
    assert time.process_time() - begun < 0.2
    assert len(found) > 500
