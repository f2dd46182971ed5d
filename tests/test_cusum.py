"""Control charts on deviations: hand arithmetic on short series, laws on made ones, charts played by rows."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from monitor import runlengths
from monitor.cusum import KNOTS, Chart, Found, cusum_episodes, cusums, ewma_episodes, statistic
from monitor.noise import Noise

PLAIN = Chart(0.25, (1.0,) * len(KNOTS))
SURE = 0.0


def found(value, charts=(PLAIN,), error=SURE) -> Found:
    value = np.asarray(value, dtype=float)
    return cusum_episodes(value, np.broadcast_to(np.asarray(error, dtype=float), len(value)), charts)


def places(one: Found) -> list[tuple[int, int, int]]:
    return list(zip(one.onset.tolist(), one.raised.tolist(), one.cleared.tolist(), strict=True))


def test_a_sum_alarms_when_it_crosses_its_threshold_and_its_onset_is_where_it_was_last_zero():
    # by hand: 0.75 - 0.25 = 0.5 a block from block 2 on: 0.5, 1.0, 1.5 > 1.0 at block 4
    assert places(found([0.0, 0.0, 0.75, 0.75, 0.75, 0.75])) == [(2, 4, 6)]


def test_an_episode_clears_when_a_sum_for_the_other_side_crosses_the_same_threshold():
    # by hand: back at 0 it gains 0.25 a block: 0.25, 0.5, 0.75, 1.0, 1.25 > 1.0 at the fifth block, 5 + 5 - 1
    assert places(found([0.0, 0.0, 0.75, 0.75, 0.75] + [0.0] * 8)) == [(2, 4, 9)]


def test_after_an_episode_the_sum_begins_anew():
    fault, calm = [0.75] * 3, [0.0] * 10
    assert places(found([*fault, *calm, *fault, *calm])) == [(0, 2, 7), (13, 15, 20)]


def test_a_gap_keeps_the_sum_as_it_is():
    gap = [math.nan] * 50
    assert places(found([0.75, 0.75, *gap, 0.75])) == [(0, 52, 53)]
    assert places(found([0.75, 0.75, *gap, 0.3])) == [(0, 52, 53)]  # 0.5 + 0.5 + 0.05
    assert places(found([0.75, 0.7, *gap, 0.2])) == []
    total, _ = statistic(np.array([0.75, math.nan, 0.75]), np.zeros(3), PLAIN)
    assert total.tolist() == [0.5, 0.5, 1.0]


def test_nothing_is_found_in_nothing():
    assert places(found([])) == []
    assert places(found([math.nan] * 5)) == []


def test_the_chart_that_alarms_first_tells_the_onset():
    # by hand: the fast one, 0.6 off and 2.0 to cross, gains 1.4 a block from block 1 on: 2.8 at block 2; the
    # slow one began at block 0 but has only 0.05 + 1.75 = 1.8 of 3.0 at block 1 and 3.55 at block 2: a tie
    # goes to the slow chart, which is named first
    slow, fast = Chart(0.25, (4.0,) * 3), Chart(0.6, (2.0,) * 3)
    assert places(found([0.3, 2.0, 2.0, 2.0], (slow, fast))) == [(1, 2, 4)]


def test_doubt_about_the_expectation_raises_threshold_and_reference():
    chart = Chart(0.25, (1.0, 2.0, 3.0))
    value = [0.75] * 20
    # by hand, 0.5 a block: thresholds 1, 2, 3 at errors of 0, 0.0625 and 0.125; an error of 0.3 makes the
    # reference 0.6, which leaves 0.15 a block: 3.15 at the 21st block
    assert found(value, (chart,), 0.0).raised.tolist() == [2]
    assert found(value, (chart,), 0.0625).raised.tolist() == [4]
    assert found(value, (chart,), 0.125).raised.tolist() == [6]
    assert found(value, (chart,), 0.3).raised.tolist() == []
    assert found([*value, 0.75], (chart,), 0.3).raised.tolist() == [20]


def test_the_charts_of_a_shift_are_made_for_it_and_for_one_two_and_four_tenths_times_as_large():
    slow, fast = cusums(Noise(0.28, 0.75), shift_pct=0.5, wanted=1440, charts=2)
    assert (slow.reference, fast.reference) == pytest.approx((0.25, 0.6))
    exact = runlengths.cusum_autocorrelated(0.25 / 0.28, slow.threshold[0] / 0.28, phi=0.75)
    assert exact == pytest.approx(2 * 1440, rel=0.02)
    assert slow.threshold == tuple(sorted(slow.threshold))
    more, _ = cusums(Noise(0.28, 0.75), shift_pct=0.5, wanted=1440, charts=6)
    assert more.threshold[0] > slow.threshold[0]  # false alarms are shared by more charts


def test_without_noise_a_deviation_beyond_the_shift_alarms_at_once_and_one_below_half_of_it_never():
    charts = cusums(Noise(0.0, 0.0), shift_pct=0.5, wanted=1440, charts=2)
    assert places(found([0.0, 0.6, 0.6], charts)) == [(1, 1, 3)]
    assert places(found([0.2] * 500, charts)) == []


def played(value, charts) -> list[tuple[int, int, int]]:
    """The same row by row."""
    episodes, sums, since, open_, back = [], [0.0] * len(charts), [0] * len(charts), None, 0.0
    for row, one in enumerate(value):
        if open_ is not None:
            back = max(0.0, back + charts[0].reference - one)
            if back > charts[0].threshold[0]:
                episodes.append((*open_, row))
                sums, since, open_, back = [0.0] * len(charts), [row + 1] * len(charts), None, 0.0
            continue
        for at, chart in enumerate(charts):
            sums[at] = max(0.0, sums[at] + one - chart.reference)
            since[at] = row + 1 if sums[at] == 0.0 else since[at]
        alarms = [at for at, chart in enumerate(charts) if sums[at] > chart.threshold[0]]
        if alarms:
            open_ = (since[alarms[0]], row)
    return episodes if open_ is None else [*episodes, (*open_, len(value))]


# Quarters are exact in binary, so that both ways of summing give the same bits.
@given(st.lists(st.integers(-8, 12).map(lambda n: n / 4), max_size=80))
def test_the_arrays_do_what_the_rows_one_by_one_do(value):
    charts = (Chart(0.25, (3.0,) * 3), Chart(1.0, (1.5,) * 3))
    assert places(found(value, charts)) == played(value, charts)


@given(st.lists(st.integers(-8, 12).map(lambda n: n / 4), min_size=2, max_size=60), st.data())
def test_what_is_known_at_a_time_depends_on_nothing_later(value, data):
    cut = data.draw(st.integers(1, len(value) - 1))
    whole = [(onset, raised) for onset, raised, _ in places(found(value)) if raised < cut]
    assert [(onset, raised) for onset, raised, _ in places(found(value[:cut]))] == whole


def test_what_was_given_is_not_changed():
    value = np.array([0.75, math.nan, 0.75, 0.75])
    kept = value.copy()
    found(value)
    ewma_episodes(value, np.zeros(4), Noise(0.2, 0.5), shift_pct=0.5, wanted=1440)
    np.testing.assert_array_equal(value, kept)


def test_an_average_alarms_on_a_lasting_shift_and_clears_when_it_is_back():
    rng = np.random.default_rng(6)
    value = 0.2 * rng.standard_normal(600)
    value[200:400] += 0.5
    one = ewma_episodes(value, np.zeros(600), Noise(0.2, 0.0), shift_pct=0.5, wanted=1440)
    assert len(one.raised) == 1
    assert 200 <= one.onset[0] <= one.raised[0] < 215
    assert 400 < one.cleared[0] < 430


def test_an_average_of_independent_values_is_falsely_alarmed_about_as_often_as_wanted():
    # A law: one false alarm in 300 blocks wanted, 60,000 blocks; the clearing takes blocks off as well, so
    # that alarms are somewhat rarer. Four standard errors of a Poisson count of 200 are 28 %.
    value = 0.3 * np.random.default_rng(12).standard_normal(60_000)
    one = ewma_episodes(value, np.zeros(60_000), Noise(0.3, 0.0), shift_pct=0.5, wanted=300)
    assert 0.5 * 200 < len(one.raised) < 1.28 * 200


def test_an_average_below_half_of_the_shift_to_find_does_not_alarm_however_quiet_the_figure_is():
    quiet = Noise(0.001, 0.0)
    for size, alarms in ((0.24, 0), (0.26, 1)):
        value = np.full(300, size)
        one = ewma_episodes(value, np.zeros(300), quiet, shift_pct=0.5, wanted=1440)
        assert len(one.raised) == alarms


def test_false_alarms_of_the_two_sums_together_come_about_as_often_as_wanted():
    # The same law for autocorrelated values: 400 blocks wanted of both charts together, in 100,000 blocks.
    rng = np.random.default_rng(13)
    phi, sd = 0.7, 0.28
    white = sd * math.sqrt(1 - phi**2) * rng.standard_normal(100_000)
    value = np.empty_like(white)
    value[0] = white[0]
    for row in range(1, len(value)):
        value[row] = phi * value[row - 1] + white[row]
    charts = cusums(Noise(sd, phi), shift_pct=0.5, wanted=400, charts=2)
    one = found(value, charts)
    open_ = np.sum(one.cleared - one.raised)
    assert 0.5 < len(one.raised) / ((len(value) - open_) / 400) < 1.3
