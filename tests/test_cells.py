"""From readings to cells: spans, holds, means by hand arithmetic and by brute force, and laws that hold."""

from __future__ import annotations

from collections import Counter
from dataclasses import astuple, replace
from datetime import UTC, datetime, timedelta
from itertools import pairwise
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from ingest.cells import (
    LEAST_SHARE,
    OPERATING,
    RULES,
    Carried,
    Cells,
    carried_after,
    cell_starts,
    cells_frame,
    cells_from_frame,
    look_back,
    make_cells,
    operating_of,
    reach,
)
from ingest.conditions import CONDITIONS
from ingest.errors import StoreError
from ingest.readings import BAD, Readings, Series
from ingest.screen import screened
from ingest.unit import SAMPLINGS, Instrument, Operating, Unit
from tests.units_made import (
    DAY,
    HOUR,
    MIDNIGHT,
    MINUTE,
    made_channel,
    made_instrument,
    made_series,
    made_unit,
)

CELL = 10 * MINUTE
PLANT = Operating("FI-1", 10.0, 20.0, 40.0, timedelta(hours=2))


def cells_of(instrument: Instrument, series: Series, minutes: float = 60, **changes: object) -> Cells:
    """The cells of one instrument from MIDNIGHT on, for so many minutes."""
    unit = made_unit(instrument, operating=None, **changes)
    return make_cells(unit, {str(instrument.tag): series}, MIDNIGHT, MIDNIGHT + int(minutes * MINUTE))


def words(cells: Cells, column: int = 0) -> list[str]:
    return [CONDITIONS[code] for code in cells.condition[:, column]]


def told(codes: np.ndarray) -> list[str]:
    return [OPERATING[code] for code in codes]


def assert_same(one: Cells, other: Cells) -> None:
    """Every number the same to the last bit."""
    for a, b in zip(astuple(one), astuple(other), strict=True):
        np.testing.assert_array_equal(a, b)


def joined(parts: list[Cells]) -> Cells:
    return Cells(*(np.concatenate(arrays) for arrays in zip(*map(astuple, parts), strict=True)))


# --- means and shares by hand


def test_every_way_of_sampling_has_a_rule_with_its_reason():
    assert set(RULES) == set(SAMPLINGS)
    assert all(rule.why for rule in RULES.values())


def test_a_stored_on_change_export_is_weighted_by_time_not_by_stored_points():
    # A day at 86 with an upset of 40 min that costs 1.7 points of the day mean: 86 - 84.3 = 1.7, times 1440
    # min is 2448. Falling and rising in 1 min each, it is 39 min deep: 86 - 2448/39 = 23.2308. Kept are 43
    # of 1440 points, 26 at 86 and 17 below, so their plain mean is (26 x 86 + 17 x 23.2308)/43 = 61.18.
    deep = 86 - 2448 / 39
    steady = [*np.linspace(0, 600, 13), *np.linspace(640, 1440, 13)]
    kept = {**dict.fromkeys(steady, 86.0), **dict.fromkeys(np.linspace(601, 639, 17), deep)}
    series = made_series(sorted(kept), [kept[minute] for minute in sorted(kept)])
    assert len(series) == 43
    assert series.value.mean() == pytest.approx(61.18, abs=0.01)
    cells = cells_of(made_instrument(max_age=timedelta(hours=2)), series, 1440)
    assert (cells.share == 1).all()
    assert cells.value.mean() == pytest.approx(84.3, abs=1e-9)


def test_an_interpolated_signal_is_the_mean_of_straight_lines():
    # 10 to 30 over 4 min, 30 to 0 over 6 min: (20 x 4 + 15 x 6)/10 = 17.
    cells = cells_of(made_instrument(max_age=timedelta(minutes=6)), made_series([0, 4, 10], [10, 30, 0]), 10)
    assert cells.value.tolist() == [[17.0]]


def test_a_result_belongs_to_the_time_the_sample_left_the_stream():
    # Stamped 10 min, 4 min late: of a sample of minute 6, and nearest to it from minute 3 on, as the one
    # before is until then. First cell (3 x 10 + 7 x 20)/10 = 17.
    channel = made_channel("AI-2", "isobutane")
    cells = cells_of(channel, made_series([4, 10, 16, 22], [10, 20, 20, 20]), 20)
    assert cells.value.tolist() == [[17.0], [20.0]]


def test_what_is_held_does_not_lag_behind_a_ramp():
    # A ramp of 1 a minute, sampled each 6 min, results 4 min late: the mean over a cell of 10 min is that of
    # the ramp, 5 above its start, but for the steps at both edges of the cell: 3 x 3 / 2 / 10 = 0.45 at
    # most. If a result stood from its sample on alone, all would lag 3 min, half a cycle.
    stamps = np.arange(0, 250, 6)
    cells = cells_of(made_channel("AI-2", "isobutane", high=np.inf), made_series(stamps + 4, stamps), 210)
    lag = (cells.start - MIDNIGHT) / MINUTE + 5 - cells.value[:, 0]
    assert abs(lag.mean()) < 1e-9
    assert abs(lag).max() < 0.5


def test_a_dead_time_moves_every_answer_by_just_that():
    minutes = np.cumsum(np.random.default_rng(3).integers(1, 9, 40))
    plain = made_channel("AI-2", "isobutane", dead_time=timedelta(0))
    late = replace(plain, dead_time=timedelta(minutes=7))
    values = np.random.default_rng(4).uniform(0, 100, 40)
    assert_same(
        cells_of(plain, made_series(minutes, values)), cells_of(late, made_series(minutes + 7, values))
    )


def test_a_result_is_held_no_longer_than_its_age_allows_then_stale_then_missing():
    # Good for 20 min, stale for as long again, missing from then on; the sample left at minute 0.
    cells = cells_of(made_channel("AI-2", "isobutane"), made_series([4], [10.0]))
    assert words(cells) == ["good", "good", "stale", "stale", "missing", "missing"]
    np.testing.assert_array_equal(cells.value[:, 0], [10, 10, np.nan, np.nan, np.nan, np.nan])
    assert cells.share[:, 0].tolist() == [1, 1, 0, 0, 0, 0]


def test_a_result_is_never_drawn_towards_the_next_one():
    # Samples of minutes 5 and 15, one each 10 min.
    channel = made_channel("AI-2", "isobutane", dead_time=timedelta(0), cycle=timedelta(minutes=10))
    assert cells_of(channel, made_series([5, 15], [10, 50]), 20).value[:, 0].tolist() == [10, 50]


def test_a_value_repeated_each_minute_is_the_same_held_signal():
    channel = made_channel("AI-2", "isobutane")
    once = made_series(range(4, 64, 6), range(10))
    repeated = made_series(range(4, 64), np.repeat(np.arange(10.0), 6))
    assert_same(cells_of(channel, once), cells_of(channel, repeated))


def test_readings_further_apart_than_their_age_allows_are_not_joined():
    cells = cells_of(made_instrument(), made_series([0, 5, 11, 16, 20], [10, 10, 90, 90, 90]), 20)
    # 0 to 5 and 11 to 20 are joined, 6 min from 5 to 11 are not: shares 5/10 and 9/10.
    assert cells.share[:, 0].tolist() == pytest.approx([0.5, 0.9])
    assert cells.value[:, 0].tolist() == [10, 90]


def test_the_mean_of_an_interval_stands_for_the_interval_that_its_stamp_closes_or_opens():
    end = made_instrument(sampling="mean at end", cycle=timedelta(minutes=5))
    start = replace(end, sampling="mean at start")
    series = made_series([5, 10, 15, 20], [10, 20, 30, 40])
    assert cells_of(end, series, 20).value[:, 0].tolist() == [15, 35]
    # From 5 to 10 only in the first cell: half covered.
    assert cells_of(start, series, 20).value[:, 0].tolist() == [10, 25]
    assert cells_of(start, series, 20).share[:, 0].tolist() == [0.5, 1]


def test_interval_means_are_not_stretched_over_a_hole():
    meter = made_instrument(sampling="mean at end", cycle=timedelta(minutes=5))
    cells = cells_of(meter, made_series([5, 30], [10, 20]), 30)
    assert words(cells) == ["good", "missing", "good"]
    assert cells.share[:, 0].tolist() == [0.5, 0, 0.5]


def test_a_cell_half_covered_counts_and_one_second_less_does_not():
    assert LEAST_SHARE == 0.5
    for minutes, word in ((5.0, "good"), (5 - 1 / 60, "missing")):
        series = made_series([10 - minutes, 10], [42.0, 42.0])
        cells = cells_of(made_instrument(), series, 10)
        assert words(cells) == [word]
        assert cells.share[0, 0] == pytest.approx(minutes / 10)
        np.testing.assert_array_equal(cells.value, [[42.0 if word == "good" else np.nan]])


def test_a_refused_reading_is_not_bridged():
    # Minute by minute, the reading at 4 is out of range: the lines 3 to 4 and 4 to 5 are lost.
    values = np.full(11, 50.0)
    values[4] = 999.0
    cells = cells_of(made_instrument(), made_series(range(11), values), 10)
    assert cells.share[0, 0] == pytest.approx(0.8)
    assert cells.value[0, 0] == 50.0


def test_a_refused_result_ends_the_one_before():
    channel = made_channel("AI-2", "isobutane", dead_time=timedelta(0), cycle=timedelta(minutes=10))
    series = made_series([5, 15, 25], [10.0, np.nan, 30.0])
    cells = cells_of(channel, series, 30)
    assert words(cells) == ["good", "bad quality", "good"]
    assert cells.share[:, 0].tolist() == [1, 0, 1]


def test_a_poor_cell_bears_the_condition_that_cost_most_of_its_time():
    # Of ten minutes 2 are good, 5 out of range, 3 of bad quality; then 3 good, 3 out of range, 4 bad.
    meter = made_instrument(sampling="mean at start")
    values = [50.0] * 2 + [999.0] * 5 + [np.nan] * 3 + [50.0] * 3 + [999.0] * 3 + [np.nan] * 4
    cells = cells_of(meter, made_series(range(20), values), 20)
    assert words(cells) == ["out of range", "bad quality"]
    assert cells.share[:, 0].tolist() == pytest.approx([0.2, 0.3])


def test_a_reading_of_bad_quality_does_not_count_whatever_its_value():
    cells = cells_of(made_instrument(), made_series(range(11), [50.0] * 11, BAD), 10)
    assert words(cells) == ["bad quality"]
    assert np.isnan(cells.value).all()


def test_a_frozen_analyzer_is_not_carried_into_averages():
    unit = made_unit()
    results = np.repeat([40.0, 41.0, *[42.0] * 8], 6)
    series = made_series(np.arange(60) + 4, results)
    readings = {"AI-2 n-butane.PV": series, "AI-2 isobutane.PV": series}
    cells = make_cells(unit, readings, MIDNIGHT, MIDNIGHT + HOUR)
    # The last new result is of minute 12; minutes 18 to 60 repeat it, the first from 15 on.
    assert words(cells, 1) == words(cells, 2) == ["good", "good", *["stuck"] * 4]
    assert cells.share[:2, 1].tolist() == pytest.approx([1, 0.5])


def test_a_declared_instrument_always_carries_its_value():
    cells = make_cells(made_unit(), {}, MIDNIGHT, MIDNIGHT + HOUR)
    assert (cells.value[:, 3] == 98).all()
    assert (cells.share[:, 3] == 1).all()
    assert set(words(cells, 3)) == {"good"}


def test_a_tag_without_readings_is_missing():
    cells = make_cells(made_unit(), {}, MIDNIGHT, MIDNIGHT + HOUR)
    assert np.isnan(cells.value[:, :3]).all()
    assert not cells.share[:, :3].any()
    assert {word for column in range(3) for word in words(cells, column)} == {"missing"}


def test_a_wild_reading_spoils_its_own_cell_only():
    bare = made_instrument(low=-np.inf, high=np.inf)
    values = np.random.default_rng(5).uniform(0, 100, 61)
    calm = cells_of(bare, made_series(range(61), values)).value[:, 0]
    values[25] = 1e30
    wild = cells_of(bare, made_series(range(61), values)).value[:, 0]
    assert np.flatnonzero(calm != wild).tolist() == [2]


# --- the grid and the clock


def test_cells_stand_on_multiples_of_their_length_since_the_epoch():
    starts = cell_starts(made_unit(), MIDNIGHT + 1, MIDNIGHT + HOUR)
    assert starts.tolist() == [MIDNIGHT + n * CELL for n in range(1, 6)]
    assert not cell_starts(made_unit(), MIDNIGHT + 1, MIDNIGHT + CELL).size
    seven_hours = cell_starts(made_unit(cell=timedelta(hours=7)), MIDNIGHT, MIDNIGHT + 7 * DAY)
    assert (seven_hours % (7 * HOUR) == 0).all()


def test_an_empty_span_has_no_cells():
    cells = make_cells(made_unit(), {"FI-1.PV": made_series(range(60), [50.0] * 60)}, MIDNIGHT, MIDNIGHT)
    assert [a.shape for a in astuple(cells)] == [(0,), (0, 4), (0, 4), (0, 4), (0,)]


def test_neighbouring_spans_share_no_cell_and_leave_none_out():
    whole = cell_starts(made_unit(), MIDNIGHT, MIDNIGHT + DAY)
    edge = MIDNIGHT + 5 * HOUR + 123_456_789
    parts = [cell_starts(made_unit(), MIDNIGHT, edge), cell_starts(made_unit(), edge, MIDNIGHT + DAY)]
    np.testing.assert_array_equal(np.concatenate(parts), whole)


def test_the_night_the_clocks_go_back_has_every_hour_once():
    # Europe/Berlin, 25 October 2026: 03:00 summer time becomes 02:00, so that day has 25 h, 150 cells.
    berlin = [pd.Timestamp(f"2026-10-{day}", tz="Europe/Berlin").tz_convert("UTC") for day in (25, 26)]
    first, last = (int(t.timestamp()) * 1_000_000 for t in berlin)
    minutes = np.arange((first - MIDNIGHT) // MINUTE, (last - MIDNIGHT) // MINUTE + 1)
    hours = (minutes - minutes[0]) / 60
    cells = make_cells(made_unit(), {"FI-1.PV": made_series(minutes, 50 + hours)}, first, last)
    assert cells.start.size == 150
    # A ramp of 1 kg/h per hour: the mean of each ten minutes lies 5 min after its start.
    np.testing.assert_allclose(cells.value[:, 0], 50 + np.arange(150) / 6 + 1 / 12, rtol=1e-13)


# --- against brute force


def standing(instrument: Instrument, series: Series, moment: float) -> tuple[str, float]:
    """Condition and value at one moment, read off the definitions one reading at a time."""
    rule = instrument.sampling
    if rule == "lab sample":
        series = series.take(np.isfinite(series.value))  # words between two results end nothing
    back = {"mean at end": instrument.cycle, "held": instrument.cycle / 2}.get(rule, timedelta(0))
    shift = instrument.dead_time + back
    age = instrument.max_age + (back if rule == "held" else timedelta(0))
    hold = (instrument.cycle if rule.startswith("mean") else age).total_seconds() * 1e6
    age_allowed = instrument.max_age.total_seconds() * 1e6
    begins = series.time - shift.total_seconds() * 1e6
    codes = [CONDITIONS[c] for c in screened(made_unit(instrument), {str(instrument.tag): series})[0]]
    at = int(np.searchsorted(begins, moment, side="right")) - 1
    if at < 0 or moment - begins[at] >= hold + age_allowed:
        return "missing", np.nan
    if moment - begins[at] >= hold:
        return "stale", np.nan
    if rule != "interpolated" or codes[at] != "good":
        return codes[at], series.value[at]
    if at + 1 == len(series) or begins[at + 1] - begins[at] > hold:
        return "stale", np.nan
    way = (moment - begins[at]) / (begins[at + 1] - begins[at])
    return codes[at + 1], series.value[at] + way * (series.value[at + 1] - series.value[at])


def irregular_series(random: np.random.Generator) -> Series:
    """Two hours or so of readings on whole seconds, 10 s to 12 min apart, some refused."""
    seconds = np.cumsum(random.choice([10, 47, 60, 60, 60, 60, 60, 180, 180, 720], 90))
    values = random.uniform(0, 100, seconds.size)
    values[random.random(seconds.size) < 0.05] = np.nan
    values[random.random(seconds.size) < 0.05] = 999.0
    return made_series(seconds / 60 - 30, values)


def irregular_meter(random: np.random.Generator, sampling: str) -> Instrument:
    return made_instrument(
        sampling=sampling,
        dead_time=timedelta(seconds=int(random.integers(0, 300))),
        cycle=timedelta(seconds=2 * int(random.integers(30, 150))),
        max_age=timedelta(seconds=int(random.integers(200, 700))),
    )


@pytest.mark.parametrize("sampling", SAMPLINGS)
def test_cells_equal_a_loop_over_every_second(sampling: str):
    # Every span begins and ends on a whole second, so the sum over the middles of seconds is exact.
    kinds: Counter[str] = Counter()
    for seed in range(6):
        random = np.random.default_rng(seed)
        meter, series = irregular_meter(random, sampling), irregular_series(random)
        cells = cells_of(meter, series)
        kinds.update(words(cells))
        for row, start in enumerate(cells.start):
            seen = [standing(meter, series, start + (second + 0.5) * 1e6) for second in range(600)]
            counts = Counter(condition for condition, _ in seen)
            share = counts.pop("good", 0) / 600
            assert cells.share[row, 0] == pytest.approx(share, abs=1e-6)
            if share >= 0.5:
                mean = np.mean([value for condition, value in seen if condition == "good"])
                assert words(cells)[row] == "good"
                assert cells.value[row, 0] == pytest.approx(mean, rel=1e-12)
            else:
                assert counts[words(cells)[row]] == max(counts.values())
                assert np.isnan(cells.value[row, 0])
    assert kinds["good"] >= 6
    assert len(kinds) >= 3


# --- laws


def rough_unit(**changes: object) -> Unit:
    """One instrument of every way of sampling, an analyzer that can be stuck, a load with all conditions."""
    return made_unit(
        made_instrument("FI-1", dead_time=timedelta(seconds=30)),
        made_instrument("FI-2", sampling="mean at end", cycle=timedelta(minutes=5)),
        made_instrument("FI-3", sampling="mean at start", cycle=timedelta(minutes=15)),
        made_channel("AI-1", "n-butane"),
        made_channel("AI-2", "isobutane"),
        made_channel("LAB", "isobutane", cycle=timedelta(hours=2), max_age=timedelta(hours=3), analyzer=None),
        **changes,
    )


# Each with the others left out, so that none hides behind an instrument that looks further.
ALONE = (("FI-1",), ("FI-2",), ("FI-3",), ("AI-1", "AI-2"), ("LAB",))


def only(names: tuple[str, ...], **changes: object) -> Unit:
    """The rough unit with these instruments and no others."""
    unit = rough_unit(**changes)
    kept = tuple(i for i in unit.instruments if i.name in names)
    return replace(unit, instruments=kept, operating=unit.operating if "FI-1" in names else None)


def rough_readings(seed: int, days: int) -> Readings:
    """Irregular readings with gaps, refused values, a frozen analyzer and a load that comes and goes."""
    random = np.random.default_rng(seed)
    return {
        **{f"FI-{n}.PV": rough_meter(random, days, every) for n, every in ((1, 1.5), (2, 5), (3, 15))},
        **rough_analyzer(random, days),
        "LAB.PV": rough_meter(random, days, 130),
    }


def rough_meter(random: np.random.Generator, days: int, every: float) -> Series:
    """Readings `every` minutes on the average; the value wanders between 0 and 120 over half a day."""
    seconds = np.cumsum(random.integers(1, int(120 * every), int(days * 1440 / every)))
    hidden = (seconds // 3600) % 37 == random.integers(37)
    values = 60 + 62 * np.sin(seconds / 7000 + random.uniform(0, 6)) + random.normal(0, 3, seconds.size)
    values[random.random(seconds.size) < 0.02] = np.nan
    return made_series(seconds[~hidden] / 60, np.clip(values, -20, 180)[~hidden])


def rough_analyzer(random: np.random.Generator, days: int) -> Readings:
    """Two channels exported each minute that stop for hours every so often."""
    minutes = np.flatnonzero(random.random(days * 1440) < 0.9)
    analysis = np.where((minutes // 200) % 5 == 0, minutes // 200, minutes // 6)
    return {
        f"AI-{n}.PV": made_series(
            minutes, np.where(random.random(minutes.size) < 0.02, np.nan, analysis % 97)
        )
        for n in (1, 2)
    }


def made_in_chunks(unit: Unit, readings: Readings, edges: list[int], *, near_only: bool = False) -> Cells:
    """The cells between the edges, chunk by chunk, each with what it needs and no more if near_only."""
    parts, carried = [], Carried()
    for first, last in pairwise(edges):
        given_to = near(unit, readings, first, last) if near_only else readings
        parts.append(make_cells(unit, given_to, first, last, carried=carried))
        carried = carried_after(parts[-1], carried)
    return joined(parts)


def near(unit: Unit, readings: Readings, first: int, last: int) -> Readings:
    """Readings from look_back before first to reach after last, which the last start lies before."""
    begin = first - look_back(unit) // timedelta(microseconds=1)
    end = last + reach(unit) // timedelta(microseconds=1)
    return {tag: s.take((s.time >= begin) & (s.time < end)) for tag, s in readings.items()}


@settings(max_examples=60, deadline=None)
@given(
    seed=st.integers(0, 10_000),
    cuts=st.lists(st.integers(0, 3 * DAY), max_size=12),
    minutes=st.sampled_from([1, 10, 60]),
    names=st.sampled_from(ALONE),
)
def test_a_cell_does_not_depend_on_the_chunk_it_was_made_in(
    seed: int, cuts: list[int], minutes: int, names: tuple[str, ...]
):
    unit, readings = only(names, cell=timedelta(minutes=minutes)), rough_readings(seed, 3)
    whole = make_cells(unit, readings, MIDNIGHT, MIDNIGHT + 3 * DAY)
    edges = [MIDNIGHT, *sorted(MIDNIGHT + cut for cut in cuts), MIDNIGHT + 3 * DAY]
    assert_same(made_in_chunks(unit, readings, edges, near_only=True), whole)


def test_a_month_is_the_same_by_the_day_by_the_week_and_as_a_whole():
    unit, readings = rough_unit(), rough_readings(7, 31)
    whole = make_cells(unit, readings, MIDNIGHT, MIDNIGHT + 31 * DAY)
    for days in (1, 7):
        edges = [*range(MIDNIGHT, MIDNIGHT + 31 * DAY, days * DAY), MIDNIGHT + 31 * DAY]
        assert_same(made_in_chunks(unit, readings, edges), whole)
    # The month is worth comparing: it holds every condition but calibrating, every operating condition.
    assert set(np.unique(whole.condition)) == set(range(6))
    assert set(np.unique(whole.operating)) == set(range(5))


@pytest.mark.parametrize("names", ALONE, ids="+".join)
def test_a_reading_changes_no_cell_beyond_its_stated_reach(names: tuple[str, ...]):
    unit, readings = only(names), rough_readings(11, 3)
    before = make_cells(unit, readings, MIDNIGHT, MIDNIGHT + 3 * DAY)
    tag = f"{names[0]}.PV"
    series = readings[tag]
    seen = 0
    for at in range(5, len(series), max(1, len(series) // 60)):
        value = series.value.copy()
        value[at] = 33.3
        moved = {**readings, tag: replace(series, value=value)}
        after = make_cells(unit, moved, MIDNIGHT, MIDNIGHT + 3 * DAY)
        same = [np.array_equal(a, b, equal_nan=True) for a, b in zip(before.value, after.value, strict=True)]
        changed = before.start[~np.array(same) | (before.condition != after.condition).any(axis=1)]
        assert (changed > series.time[at] - reach(unit) // timedelta(microseconds=1)).all()
        assert (changed <= series.time[at] + look_back(unit) // timedelta(microseconds=1)).all()
        seen += changed.size
    assert seen > 20


def test_how_far_readings_must_reach_by_hand():
    # Channel: 20 min held, 20 min stale, six cycles of 6 min; ahead a cell of 10 min, 4 min dead time, three
    # cycles. Meter: 5 min joined, 5 min stale; ahead the cell and 5 min to the next reading.
    assert look_back(made_unit()) == timedelta(minutes=3 + 20 + 20 + 36)
    assert reach(made_unit()) == timedelta(minutes=10 + 4 + 3 + 18)
    assert look_back(made_unit(made_instrument())) == timedelta(minutes=5 + 5)
    assert reach(made_unit(made_instrument())) == timedelta(minutes=10 + 5)


def test_shifting_the_clock_by_whole_cells_shifts_the_answer():
    unit, readings = rough_unit(), rough_readings(2, 2)
    shift = 1001 * CELL
    moved = {tag: replace(s, time=s.time + shift) for tag, s in readings.items()}
    here = make_cells(unit, readings, MIDNIGHT, MIDNIGHT + 2 * DAY)
    there = make_cells(unit, moved, MIDNIGHT + shift, MIDNIGHT + 2 * DAY + shift)
    assert_same(replace(there, start=there.start - shift), here)


def test_a_tag_nobody_uses_changes_nothing():
    unit, readings = rough_unit(), rough_readings(3, 1)
    with_it = {**readings, "XX-9.PV": made_series(range(60), [1.0] * 60)}
    span = MIDNIGHT, MIDNIGHT + DAY
    assert_same(make_cells(unit, with_it, *span), make_cells(unit, readings, *span))


def test_the_zone_of_the_plant_changes_nothing():
    unit, readings = rough_unit(), rough_readings(3, 1)
    elsewhere = replace(unit, time_zone="Asia/Kolkata")
    span = MIDNIGHT, MIDNIGHT + DAY
    assert_same(make_cells(elsewhere, readings, *span), make_cells(unit, readings, *span))


def test_one_instrument_does_not_depend_on_the_others():
    unit, readings = rough_unit(operating=None), rough_readings(4, 1)
    span = MIDNIGHT, MIDNIGHT + DAY
    whole = make_cells(unit, readings, *span)
    for at in (0, 1, 2, 5):
        alone = make_cells(replace(unit, instruments=(unit.instruments[at],)), readings, *span)
        np.testing.assert_array_equal(alone.value[:, 0], whole.value[:, at])


def test_meters_alike_in_all_but_their_stamps_are_kept_apart():
    unit = made_unit(made_instrument("FI-1"), made_instrument("FI-2"), operating=None)
    readings = {"FI-1.PV": made_series([0, 4], [10, 10]), "FI-2.PV": made_series([3, 8], [20, 20])}
    cells = make_cells(unit, readings, MIDNIGHT, MIDNIGHT + CELL)
    assert cells.share.tolist() == pytest.approx(np.array([[0.4, 0.5]]))


def test_making_cells_changes_no_reading():
    readings = rough_readings(5, 1)
    copies = {tag: [array.copy() for array in astuple(s)] for tag, s in readings.items()}
    make_cells(rough_unit(), readings, MIDNIGHT, MIDNIGHT + DAY)
    for tag, series in readings.items():
        for array, copy in zip(astuple(series), copies[tag], strict=True):
            np.testing.assert_array_equal(array, copy)


# --- operating condition


def operating(load: list[float], carried: Carried | None = None, plant: Operating = PLANT) -> list[str]:
    start = MIDNIGHT + np.arange(len(load)) * HOUR
    return told(operating_of(np.array(load, dtype=float), start, plant, carried or Carried()))


def test_a_unit_is_down_until_its_load_comes_back_above_the_upper_limit():
    # Down below 10, back above 20, turned down below 40, starting for 2 h.
    assert operating([50, 15, 9, 15, 20, 21, 50, 50]) == [
        "running",
        "turned down",
        "down",
        "down",
        "down",
        "starting",
        "starting",
        "running",
    ]


def test_a_return_during_starting_begins_it_anew():
    assert operating([50, 5, 50, 5, 50, 50, 50]) == [
        "running",
        "down",
        "starting",
        "down",
        "starting",
        "starting",
        "running",
    ]


def test_starting_goes_before_turned_down():
    assert operating([5, 30, 30, 30]) == ["down", "starting", "starting", "turned down"]


def test_a_load_not_seen_is_not_known_and_does_not_make_a_start():
    assert operating([50, np.nan, 15, np.nan, 50]) == [
        "running",
        "not known",
        "turned down",
        "not known",
        "running",
    ]


def test_a_return_while_the_load_is_not_seen_counts_from_the_first_cell_that_shows_it():
    assert operating([5, np.nan, np.nan, 50, 50, 50]) == [
        "down",
        "not known",
        "not known",
        "starting",
        "starting",
        "running",
    ]


def test_nothing_is_known_of_a_load_between_the_limits_before_anything_has_told():
    assert operating([15, 15, 50, 15]) == ["not known", "not known", "running", "turned down"]
    assert operating([15], Carried(down=True)) == ["down"]
    assert operating([15], Carried(down=False)) == ["turned down"]


def test_what_was_carried_in_goes_on():
    one_hour_ago = Carried(down=False, returned_us=MIDNIGHT - HOUR)
    assert operating([50, 50], one_hour_ago) == ["starting", "running"]


def test_a_start_longer_than_a_chunk_is_carried_through_it():
    plant = replace(PLANT, starting_for=timedelta(hours=5))
    carried, found = Carried(), []
    for hour, load in enumerate([5, 50, 50, 50, np.nan, 50, 50]):
        start = np.array([MIDNIGHT + hour * HOUR])
        codes = operating_of(np.array([load], dtype=float), start, plant, carried)
        nothing = np.empty((1, 0))
        carried = carried_after(Cells(start, nothing, nothing, nothing, codes), carried)
        found += told(codes)
    # Back at hour 1, so starting until hour 6.
    assert found == ["down", "starting", "starting", "starting", "not known", "starting", "running"]
    assert carried == Carried(down=False)


def test_a_unit_file_that_states_no_rule_takes_the_unit_as_running_throughout():
    cells = make_cells(made_unit(operating=None), {}, MIDNIGHT, MIDNIGHT + HOUR)
    assert told(cells.operating) == ["running"] * 6


def state_machine(load: list[float], plant: Operating) -> list[str]:
    """The same rule told one cell after the other."""
    down, returned, found = None, None, []
    for hour, value in enumerate(load):
        if value < plant.down_below:
            down = True
        elif value > plant.running_above:
            returned = hour if down else returned
            down = False
        if np.isnan(value) or down is None:
            found.append("not known")
        elif down:
            found.append("down")
        elif returned is not None and timedelta(hours=hour - returned) < plant.starting_for:
            found.append("starting")
        else:
            found.append("turned down" if value < plant.turned_down_below else "running")
    return found


LOADS = st.lists(st.sampled_from([5.0, 10.0, 15.0, 20.0, 30.0, 50.0, np.nan]), min_size=1, max_size=40)


@settings(max_examples=200, deadline=None)
@given(load=LOADS, hours=st.integers(0, 5), cut=st.integers(0, 40))
def test_the_condition_equals_a_cell_by_cell_machine_however_the_cells_are_cut(
    load: list[float], hours: int, cut: int
):
    plant = replace(PLANT, starting_for=timedelta(hours=hours))
    start = MIDNIGHT + np.arange(len(load)) * HOUR
    expected = state_machine(load, plant)
    assert operating(load, plant=plant) == expected
    found, carried = [], Carried()
    for part in (slice(0, cut), slice(cut, cut + 3), slice(cut + 3, None)):
        codes = operating_of(np.array(load)[part], start[part], plant, carried)
        nothing = np.empty((codes.size, 0))
        carried = carried_after(Cells(start[part], nothing, nothing, nothing, codes), carried)
        found += told(codes)
    assert found == expected


def test_an_idle_hour_with_noise_about_zero_is_down_and_leaves_the_ratio_alone():
    # A day at 86 with an hour of nothing but noise: mean of hours 23/24 x 86 + 1/24 x 34 = 83.8, true 86.
    random = np.random.default_rng(8)
    minutes = np.arange(24 * 60 + 1)
    idle = (minutes >= 600) & (minutes < 660)
    load = np.where(idle, random.normal(0, 0.5, minutes.size), 100.0)
    minute = {"dead_time": timedelta(0), "cycle": timedelta(minutes=1), "sampling": "mean at start"}
    channel = made_channel("AI-1", "isobutane", analyzer=None, **minute)
    readings = {
        "FI-1.PV": made_series(minutes, load),
        "AI-1.PV": made_series(minutes, np.where(idle, 34, 86)),
    }
    plant = replace(PLANT, starting_for=timedelta(0))
    cells = make_cells(
        made_unit(made_instrument(), channel, operating=plant), readings, MIDNIGHT, MIDNIGHT + DAY
    )
    assert cells.value[:, 1].mean() == pytest.approx(83.8, abs=0.05)
    hours = (cells.start - MIDNIGHT) / HOUR
    np.testing.assert_array_equal(np.array(told(cells.operating)) == "down", (hours >= 10) & (hours < 11))
    running = cells.operating == OPERATING.index("running")
    weighted = (cells.value[:, 0] * cells.value[:, 1])[running].sum() / cells.value[running, 0].sum()
    assert weighted == pytest.approx(86.0, abs=1e-9)


# --- laid out as a frame


def test_a_frame_of_cells_has_a_column_for_everything_and_gives_the_cells_back(tmp_path: Path):
    unit = made_unit()
    cells = make_cells(unit, {"FI-1.PV": made_series(range(30), [50.0] * 30)}, MIDNIGHT, MIDNIGHT + HOUR)
    frame = cells_frame(unit, cells)
    assert frame.index.name == "start"
    assert frame.index[0] == pd.Timestamp(datetime(2026, 3, 2, tzinfo=UTC))
    assert list(frame.columns[:3]) == ["value FI-1", "share FI-1", "condition FI-1"]
    assert len(frame.columns) == 3 * 4 + 1
    assert_same(cells_from_frame(unit, frame), cells)
    frame.to_parquet(tmp_path / "cells.parquet")
    assert_same(cells_from_frame(unit, pd.read_parquet(tmp_path / "cells.parquet")), cells)


def test_a_frame_gives_the_dtypes_back():
    unit = made_unit()
    cells = make_cells(unit, {}, MIDNIGHT, MIDNIGHT + HOUR)
    back = cells_from_frame(unit, cells_frame(unit, cells))
    assert [a.dtype for a in astuple(back)] == [a.dtype for a in astuple(cells)]


def test_a_frame_without_an_instrument_of_the_unit_is_refused():
    frame = cells_frame(made_unit(made_instrument()), cells_of(made_instrument(), made_series([0], [1.0])))
    with pytest.raises(StoreError, match=r"no column for AI-2 n-butane, AI-2 isobutane, certificate"):
        cells_from_frame(made_unit(), frame)
