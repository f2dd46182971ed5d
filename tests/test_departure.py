"""Drift watches on made plants, which lose yield in steps and slowly; blocks made by hand for the rules."""

from __future__ import annotations

from dataclasses import fields, replace
from datetime import timedelta

import numpy as np
import pandas as pd
import pytest

from ingest.errors import OutletError
from ingest.unit import Watch
from monitor.amounts import amount_names
from monitor.departure import Blocks, chart_count, departures, learnt, looks, steady
from monitor.drift import EPISODE_COLUMNS, limit_episodes
from monitor.figures import figures_of
from tests.drift_made import HOUR_US, Plants, blocks_of, drift_watch, operated, plants, since
from tests.units_made import MIDNIGHT

HEALTHY_H, LATER_H = 40 * 24, 30 * 24
UNIT = operated(HEALTHY_H)
HEALTHY = UNIT.healthy
FIGURES = {one.name: one for one in figures_of(UNIT, amount_names(UNIT))}


def before(blocks: Blocks, last: int) -> Blocks:
    return Blocks(*(getattr(blocks, one.name)[:last] for one in fields(Blocks)))


def found(blocks: Blocks, one: Watch | None = None, sides=("low",)) -> pd.DataFrame:
    one = one or drift_watch()
    learned = learnt(UNIT, HEALTHY, one, blocks)
    later = since(blocks, HEALTHY_H - 1)
    return departures(one, later, learned, sides=sides, charts=2)


def hours(times: pd.Series) -> np.ndarray:
    """Hours after the healthy period."""
    return ((times - pd.Timestamp(HEALTHY.last)) / pd.Timedelta(hours=1)).to_numpy()


@pytest.fixture(scope="module")
def stepped() -> Plants:
    """Ten plants that lose 1 % of their yield 240 h after the healthy period and have it back after 480 h."""
    loss = np.zeros((10, HEALTHY_H + LATER_H))
    loss[:, HEALTHY_H + 240 : HEALTHY_H + 480] = 0.01
    return plants(10, HEALTHY_H + LATER_H, 31, loss=loss)


def test_a_step_of_one_percent_is_found_within_hours_with_its_onset_and_clears_when_it_is_over(stepped):
    delays, onsets = [], []
    for place in range(10):
        told = found(blocks_of(UNIT, stepped, place))
        [fall] = [row for row in told.itertuples() if 240 < hours(told["raised"])[row.Index] <= 480]
        delays.append(hours(told["raised"])[fall.Index] - 240)
        onsets.append(hours(told["first_crossed"])[fall.Index] - 240)
        assert 480 < hours(told["cleared"])[fall.Index] < 560
        assert fall.limit - fall.worst > 0.5  # expected less seen, both in percent of the feed
        assert fall.sure <= 1.0
    assert np.mean(delays) < 12
    assert abs(np.median(onsets)) < 6


def test_an_average_finds_the_step_too(stepped):
    late = []
    for place in range(10):
        told = found(blocks_of(UNIT, stepped, place), drift_watch("ewma"))
        raised = hours(told["raised"])
        late.append(raised[(raised > 240) & (raised < 480)].min() - 240)
    assert np.mean(late) < 24


def test_a_slope_is_raised_by_a_loss_that_goes_on_and_not_by_one_that_is_over(stepped):
    rising = 0.02 * np.clip(np.arange(HEALTHY_H + LATER_H + 480) - HEALTHY_H, 0, None) / 720
    made = plants(4, HEALTHY_H + LATER_H + 480, 33, loss=rising[None])
    slope = drift_watch("slope", shift_pct=1.0)
    for place in range(4):
        told = found(blocks_of(UNIT, made, place), slope)
        assert len(told) == 1
        assert 15 * 24 < hours(told["raised"])[0] <= 40 * 24
        assert told["side"].tolist() == ["low"]
    assert all(found(blocks_of(UNIT, stepped, place), slope).empty for place in range(4))


def test_the_table_is_that_of_limits(stepped):
    told = found(blocks_of(UNIT, stepped, 0))
    one = drift_watch(low=50.0)
    limits = limit_episodes(one, np.zeros(0, np.int64), np.zeros(0), np.zeros(0), np.zeros(0, np.int8))
    assert tuple(told.columns) == EPISODE_COLUMNS
    assert told.dtypes.to_dict() == limits.dtypes.to_dict()
    assert found(before(blocks_of(UNIT, stepped, 0), HEALTHY_H)).empty


def test_a_rise_is_found_by_who_looks_for_rises(stepped):
    blocks = blocks_of(UNIT, stepped, 1)
    value = blocks.value.copy()
    value[HEALTHY_H + 240 :] *= 1.03
    risen = replace(blocks, value=value)
    raised = hours(found(risen, sides=("high",))["raised"])
    assert ((raised > 240) & (raised < 260)).any()
    sides = set(found(risen, sides=("low", "high"))["side"])
    assert "high" in sides


def test_blocks_that_do_not_tell_of_steady_running_add_nothing(stepped):
    blocks = blocks_of(UNIT, stepped, 2)
    off = slice(HEALTHY_H + 240, HEALTHY_H + 480)
    running, value = blocks.running.copy(), blocks.value.copy()
    running[off] = False
    value[off] = 10.0
    calm = found(replace(blocks, running=running, value=value))
    raised = hours(calm["raised"])
    assert not ((raised > 240) & (raised <= 480)).any()


def test_a_block_is_steady_when_all_of_it_ran_and_the_load_was_that_of_the_block_before():
    load = 100 * np.log(np.array([1.0, 1.0, 1.04, 0.95, 0.95, np.nan, 0.95, 0.95]))
    ends = MIDNIGHT + np.array([1, 2, 3, 4, 6, 7, 8, 9]) * HOUR_US  # hour 5 is missing
    nothing = np.zeros(8)
    running = np.array([True] * 7 + [False])
    blocks = Blocks(ends, nothing, nothing, np.zeros((8, 0)), load, nothing.astype(bool), running)
    # nothing before the first; 4 % is steady, 9 % is not; hour 6 follows a hole; 7, 8: no load to compare
    assert steady(blocks, HOUR_US).tolist() == [False, True, True, False, False, False, False, False]
    bare = replace(blocks, load_pct=np.full(8, np.nan))
    assert steady(bare, HOUR_US).tolist() == [True] * 7 + [False]


def test_a_drift_watch_looks_the_way_that_is_bad_for_its_figure_unless_it_says_otherwise():
    def side_of(name: str) -> tuple[str, ...]:
        return looks(drift_watch(figure=name), FIGURES[name])

    assert side_of("yield on feed") == ("low",)
    assert side_of("share of carbon dioxide") == ("high",)
    assert side_of("carbon closure") == ("low", "high")
    assert looks(drift_watch(side="high"), FIGURES["yield on feed"]) == ("high",)
    assert looks(drift_watch(side="both"), FIGURES["yield on feed"]) == ("low", "high")


def test_false_alarms_are_shared_by_all_charts_of_a_unit():
    # two sums of the yield, four of the closure on both sides, one average; limits are none of them
    watches = (
        drift_watch(),
        drift_watch(figure="carbon closure"),
        drift_watch("ewma"),
        drift_watch("limits", low=1.0),
    )
    assert chart_count(replace(UNIT, watches=watches), FIGURES) == 7


def test_an_expectation_cannot_be_learnt_from_a_few_days(stepped):
    with pytest.raises(OutletError, match=r"days of steady running with 'yield on feed'"):
        learnt(
            UNIT,
            replace(HEALTHY, last=HEALTHY.first + timedelta(days=8)),
            drift_watch(),
            blocks_of(UNIT, stepped, 0),
        )


def test_nothing_given_is_changed(stepped):
    blocks = blocks_of(UNIT, stepped, 0)
    kept = {one.name: getattr(blocks, one.name).copy() for one in fields(Blocks)}
    for test in ("cusum", "ewma", "slope"):
        found(blocks, drift_watch(test))
    for name, before in kept.items():
        np.testing.assert_array_equal(getattr(blocks, name), before)


def test_what_is_known_at_a_time_depends_on_nothing_later(stepped):
    blocks = blocks_of(UNIT, stepped, 3)
    for test in ("cusum", "ewma", "slope"):
        whole = found(blocks, drift_watch(test))
        for cut in (250, 300, 500, 600):
            seen = found(before(blocks, HEALTHY_H + cut), drift_watch(test))
            until = whole[hours(whole["raised"]) <= cut]
            assert seen["raised"].tolist() == until["raised"].tolist()
            assert seen["first_crossed"].tolist() == until["first_crossed"].tolist()
