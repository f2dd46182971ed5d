"""Checks on single readings: quality, range by kind of instrument, an analyzer that has stopped."""

from __future__ import annotations

from dataclasses import replace
from datetime import timedelta

import numpy as np
import pytest

from ingest.checks import CHECKS, RANGE_RULES
from ingest.conditions import (
    ANSWERS,
    BAD_QUALITY,
    CONDITIONS,
    GOOD,
    NOT_CHECKED,
    OUT_OF_RANGE,
    PASSED,
    REFUSED,
    STUCK,
    SUSPECT,
    UNCERTAIN_QUALITY,
)
from ingest.readings import BAD, UNCERTAIN, UNKNOWN
from ingest.screen import not_checked, screened, tally
from ingest.stuck import STUCK_LOOKS_AHEAD, STUCK_LOOKS_BACK, stuck
from ingest.unit import KINDS
from tests.units_made import MIDNIGHT, MINUTE, made_channel, made_instrument, made_series, made_unit

CYCLE = timedelta(minutes=6)


def screen(series, instrument):
    """Conditions of the readings of a unit's only instrument."""
    return screened(made_unit(instrument), {str(instrument.tag): series})[0]


def results(values: list[float], every: int = 6) -> list[float]:
    """Each result repeated minute by minute until the next, as a historian exports it."""
    return list(np.repeat(values, every))


def by_minute(values: list[float]):
    return made_series(range(len(values)), values)


def test_every_kind_of_instrument_has_a_rule_for_its_range_with_a_reason():
    assert set(RANGE_RULES) == set(KINDS)
    assert all(rule.why for rule in RANGE_RULES.values())


def test_the_codes_are_places_in_the_list_of_conditions():
    assert [CONDITIONS[c] for c in (GOOD, BAD_QUALITY, OUT_OF_RANGE, STUCK)] == [
        "good",
        "bad quality",
        "out of range",
        "stuck",
    ]


def test_only_bad_quality_is_refused_uncertain_is_doubted_and_unknown_is_not_checked():
    told = (
        (BAD, BAD_QUALITY, REFUSED),
        (UNCERTAIN, UNCERTAIN_QUALITY, SUSPECT),
        (UNKNOWN, GOOD, NOT_CHECKED),
    )
    for quality, condition, answer in told:
        series, meter = made_series([0], [50.0], quality), made_instrument()
        assert screen(series, meter).tolist() == [condition]
        (found,) = (one for one in tally(made_unit(meter), {"FI-1.PV": series}) if one.check == "quality")
        assert found.answer == answer


def test_every_check_has_a_reason_and_every_condition_is_told_by_a_check_or_by_time():
    assert all(check.why for check in CHECKS.values())
    told = {code for check in CHECKS.values() for code in (check.suspect, check.bad)}
    assert {CONDITIONS[code] for code in told} == set(CONDITIONS) - {"missing", "stale"}


def test_stored_codes_keep_their_meaning():
    # The codes that months worked out before hold: new conditions come after them.
    kept = ("good", "missing", "stale", "bad quality", "out of range", "stuck", "calibrating")
    assert CONDITIONS[:7] == kept
    assert ANSWERS == ("good", "not checked", "suspect", "bad")


@pytest.mark.parametrize("value", [np.nan, np.inf, -np.inf, 3.4028235e38, 1.7976931348623157e308])
def test_no_number_or_the_largest_single_or_double_is_of_bad_quality_with_or_without_a_range(value: float):
    # Largest finite values of binary32 and binary64: IEEE 754-2019, table 3.5 (from memory).
    bare = made_instrument(low=-np.inf, high=np.inf)
    assert screen(made_series([0], [value]), bare).tolist() == [BAD_QUALITY]
    assert screen(made_series([0], [value]), made_instrument()).tolist() == [BAD_QUALITY]


def test_a_transmitter_measures_from_3_8_to_20_5_milliamperes():
    # NAMUR NE 43: 3.8 mA is -1.25 % and 20.5 mA is 103.125 % of the span, here 0 to 200 kg/h.
    series = made_series(range(4), [-2.6, -2.5, 206.25, 206.3])
    assert screen(series, made_instrument()).tolist() == [OUT_OF_RANGE, GOOD, GOOD, OUT_OF_RANGE]


def test_a_fraction_is_noisy_about_zero_but_not_trusted_above_its_calibrated_range():
    series = made_series(range(4), [-0.13, -0.12, 10.0, 10.01])  # 1.25 % of 10 mol% is 0.125
    channel = made_channel("AI-2", "isobutane", high=10.0)
    assert screen(series, channel).tolist() == [OUT_OF_RANGE, GOOD, GOOD, OUT_OF_RANGE]


def test_a_signal_has_its_limits_as_they_are_written():
    valve = made_instrument(kind="signal", low=0.0, high=1.0)
    assert screen(made_series(range(3), [-0.001, 1.0, 1.001]), valve).tolist() == [
        OUT_OF_RANGE,
        GOOD,
        OUT_OF_RANGE,
    ]


def test_with_one_limit_stated_that_limit_holds_as_written():
    meter = made_instrument(high=np.inf)
    assert screen(made_series(range(3), [-0.1, 0.0, 1e6]), meter).tolist() == [OUT_OF_RANGE, GOOD, GOOD]


def test_an_instrument_without_a_range_says_that_it_is_not_checked():
    bare = made_instrument(low=-np.inf, high=np.inf)
    unit = made_unit(bare)
    assert screen(made_series([0], [1e9]), bare).tolist() == [GOOD]
    assert not_checked(unit, bare)["range"] == "no range is stated"
    assert "range" not in not_checked(unit, made_instrument())


def test_only_an_analyzer_with_two_channels_is_checked_for_being_stuck():
    unit = made_unit()
    meter, butane, isobutane, certificate = unit.instruments
    assert "stuck" in not_checked(unit, meter)
    assert "stuck" not in not_checked(unit, butane) | not_checked(unit, isobutane)
    assert set(not_checked(unit, certificate)) == set(CHECKS)
    assert "stuck" in not_checked(made_unit(butane), butane)


def test_a_check_that_cannot_run_says_why_and_counts_its_readings_as_not_checked():
    unit = made_unit()
    readings = {"FI-1.PV": by_minute([50.0] * 7), "AI-2 n-butane.PV": by_minute([97.0] * 3)}
    found = {(one.instrument, one.check): one for one in tally(unit, readings)}
    assert len(found) == 3 * len(CHECKS)  # the certificate is declared
    step = found["FI-1", "step"]
    assert (step.counts, step.reason) == ((0, 7, 0, 0), "no largest_step is stated")
    assert (found["FI-1", "range"].counts, found["FI-1", "range"].answer) == ((7, 0, 0, 0), PASSED)
    assert found["FI-1", "calibration"].reason == "is no channel of an analyzer"
    assert found["AI-2 n-butane", "raw sum"].reason == "no sum_band is stated"
    assert found["AI-2 isobutane", "quality"].counts == (0, 0, 0, 0)


def test_a_reading_that_one_check_refused_is_not_checked_by_the_next():
    lost = made_series(range(4), [50.0, np.nan, 250.0, 50.0])
    found = {one.check: one for one in tally(made_unit(made_instrument()), {"FI-1.PV": lost})}
    assert found["quality"].counts == (3, 0, 0, 1)
    assert found["range"].counts == (2, 1, 0, 1)
    assert found["range"].answer == REFUSED


def test_a_healthy_analyzer_that_repeats_83_percent_of_its_minutes_is_not_stuck():
    # A 6 min cycle exported each minute: 5 of 6 values repeat the one before.
    random = np.random.default_rng(1)
    channels = [by_minute(results(list(random.normal(size=50)))) for _ in range(2)]
    repeats = np.mean(np.diff(channels[0].value) == 0)
    assert repeats == pytest.approx(5 / 6, abs=0.01)
    assert not any(flags.any() for flags in stuck(channels, CYCLE))


def test_a_frozen_analyzer_is_stuck_from_its_first_analysis_that_brought_nothing_new():
    # The last new result comes at minute 12; the analyses due at 18 and 24 repeat it.
    channels = [by_minute(results([1, 2, 3, 3, 3])), by_minute(results([7, 8, 9, 9, 9]))]
    for flags in stuck(channels, CYCLE):
        assert np.flatnonzero(flags).tolist() == list(range(18, 30))


def test_one_repeated_analysis_is_no_finding():
    channels = [by_minute(results([1, 2, 2, 3])), by_minute(results([7, 8, 8, 9]))]
    assert not any(flags.any() for flags in stuck(channels, CYCLE))


def test_results_stored_once_each_are_counted_just_the_same():
    minutes = [0, 6, 12, 18, 24]
    channels = [made_series(minutes, [1, 2, 2, 2, 3]), made_series(minutes, [7, 8, 8, 8, 9])]
    for flags in stuck(channels, CYCLE):
        assert flags.tolist() == [False, False, True, True, False]


def test_one_channel_that_moves_frees_the_others():
    channels = [by_minute(results([3] * 6)), by_minute(results([4, 5, 6, 7, 8, 9]))]
    assert not any(flags.any() for flags in stuck(channels, CYCLE))


def test_one_channel_alone_is_not_checked_even_when_the_other_is_there_without_numbers():
    empty_handed = by_minute([np.nan] * 60)
    flags, _ = stuck([by_minute([0.0] * 60), empty_handed], CYCLE)
    assert not flags.any()


def test_a_bad_reading_between_two_equal_ones_brings_nothing_new():
    values = results([1, 2, 2, 2, 2])
    values[14] = np.nan
    channels = [by_minute(values), by_minute(results([7, 8, 8, 8, 8]))]
    assert np.flatnonzero(stuck(channels, CYCLE)[1]).tolist() == list(range(12, 30))


def test_what_comes_back_after_a_gap_is_new():
    minutes = [0, 1, 2, 61, 62]  # two cycles are 12 min
    channels = [made_series(minutes, [1.0] * 5), made_series(minutes, [2.0] * 5)]
    assert not any(flags.any() for flags in stuck(channels, CYCLE))


def test_channels_need_not_share_their_times():
    channels = [made_series(range(0, 40, 2), [1.0] * 20), made_series(range(1, 40, 3), [2.0] * 13)]
    first, second = stuck(channels, CYCLE)
    # All repeat from minute 1, when the second channel first gave a number: stuck from minute 7.
    assert channels[0].time[first].min() == MIDNIGHT + 8 * MINUTE
    assert channels[1].time[second].min() == MIDNIGHT + 7 * MINUTE


def patchy_channel(random: np.random.Generator) -> tuple[np.ndarray, np.ndarray]:
    """Minutes and values of four hours with repeats, gaps and missing numbers."""
    minutes = np.flatnonzero(random.random(240) < random.choice([0.1, 0.4, 1.0]))
    gap = random.integers(0, 200)
    minutes = minutes[(minutes < gap) | (minutes > gap + random.integers(5, 40))]
    change = random.choice([30, 60])
    values = np.where(random.random(minutes.size) < 0.05, np.nan, (minutes + random.integers(6)) // change)
    return minutes, values.astype(float)


def test_being_stuck_depends_on_a_stated_stretch_of_readings_only():
    before, after = (n * CYCLE // timedelta(microseconds=1) for n in (STUCK_LOOKS_BACK, STUCK_LOOKS_AHEAD))
    found = 0
    for seed in range(60):
        random = np.random.default_rng(seed)
        channels = [made_series(*patchy_channel(random)) for _ in range(2)]
        whole = stuck(channels, CYCLE)
        for series, flags in zip(channels, whole, strict=True):
            for time, flag in zip(series.time, flags, strict=True):
                part = [s.take((s.time >= time - before) & (s.time <= time + after)) for s in channels]
                part = [s for s in part if len(s)]
                alone = np.concatenate([s.time for s in part]) == time
                assert (np.concatenate(stuck(part, CYCLE))[alone] == flag).all()
                found += int(flag)
    assert found > 1000


def test_stuck_readings_of_bad_quality_stay_of_bad_quality():
    unit = made_unit()
    frozen = by_minute([50.0] * 60)
    lost = replace(frozen, quality=np.where(np.arange(60) < 30, frozen.quality, np.int8(BAD)).astype(np.int8))
    codes = screened(unit, {"AI-2 n-butane.PV": frozen, "AI-2 isobutane.PV": lost})
    assert codes[1].tolist() == [GOOD] * 6 + [STUCK] * 54
    assert codes[2].tolist() == [GOOD] * 6 + [STUCK] * 24 + [BAD_QUALITY] * 30


def test_a_meter_may_rest_on_one_value_as_long_as_it_likes():
    unit = made_unit()
    assert screened(unit, {"FI-1.PV": by_minute([50.0] * 300)})[0].tolist() == [GOOD] * 300


def test_a_declared_instrument_and_a_tag_without_readings_have_no_codes():
    codes = screened(made_unit(), {"FI-1.PV": by_minute([50.0])})
    assert [c.size for c in codes] == [1, 0, 0, 0]


def test_screening_changes_no_reading():
    readings = {f"{name}.PV": by_minute([50.0, -9.0, np.nan] * 10) for name in ("FI-1", "AI-2 n-butane")}
    copies = {tag: series.value.copy() for tag, series in readings.items()}
    screened(made_unit(), readings)
    for tag, series in readings.items():
        np.testing.assert_array_equal(series.value, copies[tag])
