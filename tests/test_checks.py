"""Checks that need something stated: steps, calibration, raw sum, air in the sample; and their reach."""

from __future__ import annotations

from dataclasses import replace
from datetime import timedelta

import numpy as np
import pytest

from demo_data import meters, scenario
from demo_data.exports import UNIT_FILE
from demo_data.plant import simulate
from ingest.cells import cells_frame, look_back, make_cells, reach
from ingest.chemistry import DRY_AIR
from ingest.conditions import (
    AIR_INGRESS,
    CALIBRATING,
    CONDITIONS,
    DILUTED,
    GOOD,
    NOT_CHECKED,
    PASSED,
    REFUSED,
    STUCK,
    SUM_OUT_OF_BAND,
    SUSPECT,
)
from ingest.readings import Series
from ingest.screen import NORMALISED, not_checked, screened, tally
from ingest.steps import steps
from ingest.unit import Analyzer, Uncertainty, Unit
from ingest.unitfile import load
from tests.units_made import DAY, MIDNIGHT, MINUTE, made_channel, made_instrument, made_series, made_unit

CYCLE = timedelta(minutes=6)
US = timedelta(microseconds=1)


def by_minute(values):
    return made_series(range(len(values)), values)


def each_six(values):
    """A result every 6 minutes, repeated minute by minute as a historian exports it."""
    return by_minute(np.repeat(np.asarray(values, dtype=float), 6))


def stepped(series, largest: float = 2.0, cycle: int = 1, gap: int = 5) -> list[int]:
    return steps(
        series,
        np.isfinite(series.value),
        largest=largest,
        cycle=timedelta(minutes=cycle),
        greatest_gap=timedelta(minutes=gap),
    ).tolist()


# --- steps


def test_a_level_that_comes_and_goes_within_two_cycles_is_a_spike_and_what_follows_is_good():
    assert stepped(by_minute([50, 50, 90, 50, 50])) == [NOT_CHECKED, PASSED, REFUSED, PASSED, PASSED]
    assert stepped(by_minute([50, 50, 90, 90, 51, 51]))[2:] == [REFUSED, REFUSED, PASSED, PASSED]


def test_which_side_of_a_step_that_stays_is_true_nothing_tells():
    assert stepped(by_minute([50, 50, 90, 90, 90, 90])) == [NOT_CHECKED, PASSED, SUSPECT, *[PASSED] * 3]


def test_a_spike_that_leaves_the_process_elsewhere_is_followed_by_a_doubt():
    assert stepped(by_minute([50, 50, 90, 60, 60])) == [NOT_CHECKED, PASSED, REFUSED, SUSPECT, PASSED]


def test_a_staircase_in_one_direction_is_no_spike():
    assert stepped(by_minute([50, 50, 60, 70, 80, 80])) == [NOT_CHECKED, PASSED, *[SUSPECT] * 3, PASSED]


def test_a_slope_just_as_steep_as_the_process_can_is_good():
    assert stepped(by_minute(50 + 2.0 * np.arange(8) * 0.1), largest=0.2)[1:] == [PASSED] * 7


def test_after_a_gap_of_three_cycles_the_process_may_be_three_steps_away():
    assert stepped(made_series([0, 1, 4], [50, 50, 56]))[-1] == PASSED
    assert stepped(made_series([0, 1, 4], [50, 50, 56.1]))[-1] == SUSPECT


def test_what_comes_after_the_greatest_gap_is_not_checked_for_one_cycle():
    assert stepped(made_series([0, 1, 7, 8], [50, 50, 90, 90])) == [NOT_CHECKED, PASSED, NOT_CHECKED, PASSED]


def test_a_spike_in_an_analyzer_is_counted_in_its_cycles_however_often_the_export_repeats_it():
    answers = stepped(each_six([5, 5, 9, 5, 5]), cycle=6, gap=20)
    assert answers == [*[NOT_CHECKED] * 6, *[PASSED] * 6, *[REFUSED] * 6, *[PASSED] * 12]


def test_a_value_that_is_no_number_is_not_checked_and_hides_no_step():
    assert stepped(by_minute([50, 50, np.nan, 90, 90])) == [
        NOT_CHECKED, PASSED, NOT_CHECKED, SUSPECT, PASSED,
    ]  # fmt: skip


def test_a_spike_takes_no_part_in_the_cell_and_a_step_that_stays_does():
    # 10 minutes of 50 with one reading of 90 in the middle; each is the mean of its minute: 50 without it.
    unit = made_unit(made_instrument(largest_step=2.0, sampling="mean at start"), operating=None)
    spiked = by_minute([*[50.0] * 15, 90.0, *[50.0] * 14])
    cells = make_cells(unit, {"FI-1.PV": spiked}, MIDNIGHT, MIDNIGHT + 30 * MINUTE)
    assert cells.value[:, 0].tolist() == [50.0, 50.0, 50.0]
    assert cells.share[1, 0] == pytest.approx(0.9)
    moved = by_minute([*[50.0] * 10, *[90.0] * 20])
    cells = make_cells(unit, {"FI-1.PV": moved}, MIDNIGHT, MIDNIGHT + 30 * MINUTE)
    assert cells.value[:, 0].tolist() == [50.0, 90.0, 90.0]


# --- calibration


def analyzed(**stated) -> Unit:
    """The made unit with a status signal and whatever is stated of its analyzer AI-2."""
    return with_status(made_unit(), **stated)


def with_status(unit: Unit, **stated) -> Unit:
    """A unit with a status signal besides."""
    signal = made_instrument(
        "status", kind="signal", unit="-", stream=None, sampling="held", low=-np.inf, high=np.inf,
        max_age=timedelta(hours=4),
    )  # fmt: skip
    return replace(unit, instruments=(*unit.instruments, signal), analyzers=(Analyzer("AI-2", **stated),))


STATUS = {"status": "status", "calibrating": (1.0, 2.0)}
BUTANE, ISOBUTANE = (f"AI-2 {name}.PV" for name in ("n-butane", "isobutane"))


def conditions(unit: Unit, readings) -> list[list[str]]:
    return [[CONDITIONS[code] for code in codes] for codes in screened(unit, readings)]


def sampled(first, second):
    """Results of both channels every 6 minutes, stored once each."""
    minutes = 6 * np.arange(len(first))
    return {BUTANE: made_series(minutes, first), ISOBUTANE: made_series(minutes, second)}


def test_results_stamped_while_the_status_says_calibrating_are_masked_by_number():
    readings = sampled([60, 61, 5, 5.1, 62, 60], [40, 39, 5, 5.2, 38, 40])
    readings["status.PV"] = made_series([0, 10, 15, 20], [0, 1, 2, 0])  # both 1 and 2 mean calibrating
    _, butane, isobutane, _, _ = conditions(analyzed(**STATUS), readings)
    assert butane == isobutane == ["good", "good", "calibrating", "calibrating", "good", "good"]


def test_results_go_on_being_masked_while_the_line_is_flushed():
    readings = sampled([60, 61, 5, 30, 62, 60], [40, 39, 5, 20, 38, 40])
    readings["status.PV"] = made_series([0, 10, 15], [0, 1, 0])
    settling = analyzed(**STATUS, settle=timedelta(minutes=4))
    assert conditions(settling, readings)[1][:5] == ["good", "good", "calibrating", "calibrating", "good"]
    assert conditions(analyzed(**STATUS), readings)[1][3] == "good"


def test_the_last_result_of_the_gas_is_masked_as_often_as_the_export_repeats_it():
    # The status goes back at minute 14, in the middle of a cycle: minutes 14 to 17 still show the gas.
    readings = {BUTANE: each_six([60, 61, 5, 62]), ISOBUTANE: each_six([40, 39, 5, 38])}
    readings["status.PV"] = made_series([0, 12, 14], [0, 1, 0])
    masked = screened(analyzed(**STATUS), readings)[1] == CALIBRATING
    assert np.flatnonzero(masked).tolist() == list(range(12, 18))


def test_a_status_that_is_too_old_or_bad_or_not_there_leaves_results_not_checked():
    readings = sampled([60, 61, 62], [40, 39, 38])
    for status in ({}, {"status.PV": made_series([0], [np.nan])}, {"status.PV": made_series([-300], [1.0])}):
        found = tally(analyzed(**STATUS), {**readings, **status})
        (one,) = (f for f in found if (f.instrument, f.check) == ("AI-2 n-butane", "calibration"))
        assert (one.counts, one.reason) == ((0, 3, 0, 0), "")


def test_all_channels_near_the_certificate_at_once_are_the_calibration_gas_and_one_alone_is_chance():
    # At 50: 2 % and 3 x sqrt(0.202^2 + 0.352^2) make 2.217. At 5: 0.1 and 3 x sqrt(0.022^2 + 0.037^2), 0.229.
    gas = analyzed(certificate=(("AI-2 n-butane", 50.0), ("AI-2 isobutane", 5.0)), tolerance=0.02)
    readings = sampled([60, 52.21, 50, 50, 52.23, 50], [40, 5.22, 4.78, 40, 5, 5.24])
    for channel in conditions(gas, readings)[1:3]:
        assert channel == ["good", "calibrating", "calibrating", "good", "good", "good"]


def test_a_channel_without_a_result_leaves_the_certificate_not_checked():
    gas = analyzed(certificate=(("AI-2 n-butane", 50.0), ("AI-2 isobutane", 5.0)), tolerance=0.02)
    readings = sampled([50, 50, 60], [5, np.nan, 40])
    (one,) = (f for f in tally(gas, readings) if (f.instrument, f.check) == ("AI-2 n-butane", "calibration"))
    assert one.counts == (1, 1, 0, 1)


def test_either_status_or_certificate_is_enough_to_mask():
    both = analyzed(**STATUS, certificate=(("AI-2 n-butane", 50.0), ("AI-2 isobutane", 5.0)), tolerance=0.02)
    readings = sampled([60, 50, 70, 60], [40, 5, 30, 40])
    readings["status.PV"] = made_series([0, 11, 13], [0, 1, 0])
    assert conditions(both, readings)[1] == ["good", "calibrating", "calibrating", "good"]


def test_zero_gas_is_known_by_the_floors_that_are_stated():
    zero = analyzed(certificate=(("AI-2 n-butane", 0.0), ("AI-2 isobutane", 0.0)), tolerance=0.02)
    # 3 x sqrt(2) x 0.002 = 0.0085
    assert conditions(zero, sampled([0.008, 0.009], [-0.008, 0.0]))[1] == ["calibrating", "good"]


def test_calibration_for_20_minutes_then_3_hours_stuck_move_no_average():
    # Gotcha 7: masked by status; stuck from the first analysis that brought nothing new, known after two;
    # what was last read is not carried on.
    random = np.random.default_rng(3)
    first = np.round(60 + 0.2 * random.standard_normal(80), 3)
    second = np.round(40 + 0.2 * random.standard_normal(80), 3)
    first[20:24], second[20:24] = 5.0, 50.0  # gas at minutes 120 to 143
    first[40:70], second[40:70] = first[40], second[40]  # stuck from minute 240 to 419
    readings = {BUTANE: each_six(first), ISOBUTANE: each_six(second)}
    readings["status.PV"] = made_series([0, 120, 144], [0, 1, 0])
    unit = analyzed(**STATUS)
    codes = screened(unit, readings)[1]
    assert np.flatnonzero(codes == CALIBRATING).tolist() == list(range(120, 144))
    assert np.flatnonzero(codes == STUCK).tolist() == list(range(246, 420))
    cells = make_cells(unit, readings, MIDNIGHT, MIDNIGHT + 480 * MINUTE)
    named = [CONDITIONS[code] for code in cells.condition[:, 1]]
    assert {"calibrating", "stuck", "good"} <= set(named)
    shown = cells.value[:-1, 1][np.array(named[:-1]) == "good"]
    # Six standard deviations of a single result about the level: neither gas nor anything else lies there.
    assert np.abs(shown - 60).max() < 1.2
    assert np.isnan(cells.value[25:40, 1]).all()
    assert set(named[25:41]) == {"stuck"}


# --- the raw sum


def test_a_sum_out_of_its_band_is_doubted_kept_and_shown():
    unit = analyzed(sum_band=(98.0, 102.0))
    readings = sampled([60, 60, 60, np.nan], [40, 42, 42.1, 40])
    assert conditions(unit, readings)[1] == ["good", "good", "sum out of band", "bad quality"]
    assert conditions(unit, readings)[2] == ["good", "good", "sum out of band", "good"]
    (one,) = (f for f in tally(unit, readings) if (f.instrument, f.check) == ("AI-2 isobutane", "raw sum"))
    assert (one.counts, one.answer) == ((2, 1, 1, 0), SUSPECT)
    held = {
        tag: made_series(6 * np.arange(10), [value] * 10) for tag, value in ((BUTANE, 60), (ISOBUTANE, 44))
    }
    held[BUTANE].value[:] += np.arange(10) * 0.01  # so that it is not stuck
    cells = make_cells(unit, held, MIDNIGHT, MIDNIGHT + 40 * MINUTE)
    assert set(cells.condition[:, 1]) == {SUM_OUT_OF_BAND}
    assert np.isfinite(cells.value[:, 1]).all()


def test_the_raw_sum_is_stored_beside_the_readings_in_their_unit():
    unit = analyzed(sum_band=(98.0, 102.0))
    readings = sampled([60, 61, 62, 63], [40, 42, 44, 46])
    cells = make_cells(unit, readings, MIDNIGHT, MIDNIGHT + 30 * MINUTE)
    frame = cells_frame(unit, cells)
    # A result stands for 3 min about its sample, 4 min before its stamp. The second cell, minutes 10 to 20:
    # stamp 12 until minute 11, stamp 18 from then on, so 0.1 x 62 + 0.9 x 63, and the other likewise.
    assert frame["sum AI-2"].iloc[1] == pytest.approx(0.1 * 106 + 0.9 * 109)
    np.testing.assert_array_equal(frame["sum AI-2"], cells.value[:, 1] + cells.value[:, 2])
    assert not [name for name in cells_frame(made_unit(), cells) if name.startswith("sum")]


def test_a_sum_without_one_of_its_channels_is_not_checked():
    readings = sampled([60, 60, 60], [40, 42, 44])
    found = tally(analyzed(sum_band=(98.0, 102.0)), {BUTANE: readings[BUTANE]})
    (one,) = (f for f in found if (f.instrument, f.check) == ("AI-2 n-butane", "raw sum"))
    assert one.counts == (0, 3, 0, 0)


def test_a_sum_that_is_constant_to_rounding_cannot_test_a_list_that_lacks_a_component():
    # Gotcha 2: 1.7 % of the sample is not on the list; normalised, the rest adds up to 100.00 all the same.
    unit = analyzed(sum_band=(98.0, 102.0))
    random = np.random.default_rng(5)
    raw = np.array([59.0, 39.3])[:, None] * (1 + 0.004 * random.standard_normal((2, 200)))
    normalised = np.round(100 * raw / raw.sum(axis=0), 3)
    assert normalised.sum(axis=0) == pytest.approx(100.0, abs=0.002)
    for values, counts, reason in ((normalised, (0, 200, 0, 0), NORMALISED), (raw, None, "")):
        found = tally(unit, sampled(*values))
        (one,) = (f for f in found if (f.instrument, f.check) == ("AI-2 n-butane", "raw sum"))
        assert one.reason == reason
        assert counts is None or one.counts == counts


# --- air in the sample, on case E: an epoxidation with 1 % of air leaking into the outlet sample

OUTLET = {  # kmol/h, the case as stated: 10 % conversion, 86 % selectivity
    "ethylene": 25.2, "oxygen": 5.62, "carbon dioxide": 1.784, "ethylene oxide": 2.408,
    "water": 1.084, "nitrogen": 0.4, "argon": 0.5, "methane": 61.8,
}  # fmt: skip
IN_AIR = {
    "nitrogen": DRY_AIR["N2"],
    "oxygen": DRY_AIR["O2"],
    "argon": 0.00934,
}  # US Standard Atmosphere 1976, from memory
WHOLE = sum(OUTLET.values())


def with_air(share: float) -> dict[str, float]:
    """Fractions of the outlet sample with a share of air in it [mol%]."""
    return {
        name: 100 * ((1 - share) * flow / WHOLE + share * IN_AIR.get(name, 0.0))
        for name, flow in OUTLET.items()
    }


def epoxidation(**stated) -> Unit:
    channels = [
        made_channel(f"AI-2 {name}", name, high=np.inf, low=-np.inf, random=Uncertainty(0.003, 0.002))
        for name in OUTLET
    ]
    held = (("AI-2 nitrogen", 0.3, 0.5), ("AI-2 oxygen", 5.0, 6.5))
    return made_unit(*channels, operating=None, analyzers=(Analyzer("AI-2", **{"air": held, **stated}),))


def read(samples: list[dict[str, float]]):
    minutes = 6 * np.arange(len(samples))
    return {f"AI-2 {name}.PV": made_series(minutes, [one[name] for one in samples]) for name in OUTLET}


def test_nitrogen_and_oxygen_that_rise_by_one_share_of_air_are_set_aside_and_the_rest_is_doubted():
    codes = dict(zip(OUTLET, screened(epoxidation(), read([with_air(0), with_air(0.01)])), strict=True))
    assert DRY_AIR["N2"] / DRY_AIR["O2"] == pytest.approx(3.73, abs=0.005)
    for name, (before, after) in codes.items():
        assert before == GOOD
        assert after == (AIR_INGRESS if name in ("nitrogen", "oxygen") else DILUTED)


def test_without_the_nitrogen_tie_a_leak_of_air_moves_conversion_by_one_point_and_not_to_69_percent():
    # Gotcha 6: conversion = 1 - outlet / 28 of ethylene; the outlet from each tie by hand.
    leaked = with_air(0.01)
    by_nitrogen = 1 - leaked["ethylene"] / leaked["nitrogen"] * 0.4 / 28
    by_argon = 1 - leaked["ethylene"] / leaked["argon"] * 0.5 / 28
    by_flow = 1 - leaked["ethylene"] / 100 * WHOLE / 28
    assert (by_nitrogen, by_flow, by_argon) == pytest.approx((0.69, 0.109, 0.116), abs=0.006)
    cells = make_cells(
        epoxidation(), read([with_air(0.01 + 1e-9 * n) for n in range(4)]), MIDNIGHT, MIDNIGHT + 10 * MINUTE
    )
    kept = dict(zip(OUTLET, cells.value[0], strict=True))
    assert np.isnan([kept["nitrogen"], kept["oxygen"]]).all()
    assert kept["ethylene"] == pytest.approx(leaked["ethylene"], rel=1e-7)
    assert 1 - kept["ethylene"] / kept["argon"] * 0.5 / 28 == pytest.approx(by_argon, rel=1e-6)


def test_nitrogen_that_rises_without_oxygen_is_no_air():
    purged = {**with_air(0), "nitrogen": 1.2, "oxygen": 5.0}
    assert {code for codes in screened(epoxidation(), read([purged])) for code in codes} == {GOOD}


def test_oxygen_that_rises_without_nitrogen_is_no_air():
    unconverted = {**with_air(0), "oxygen": 7.5}
    assert {code for codes in screened(epoxidation(), read([unconverted])) for code in codes} == {GOOD}


def test_a_leak_below_what_the_channel_can_be_off_is_not_called_one():
    # nitrogen may be 0.5 mol%; 1.96 sqrt((0.003 x 0.5 + 0.002)^2 + (0.007 x 0.5 + 0.002)^2) = 0.013
    for extra, found in ((0.012, False), (0.014, True)):
        sample = {**with_air(0), "nitrogen": 0.5 + extra}
        codes = screened(epoxidation(), read([sample]))[list(OUTLET).index("nitrogen")]
        assert (codes == AIR_INGRESS).tolist() == [found]


def test_without_one_of_the_two_gases_air_is_not_checked():
    readings = read([with_air(0.01)] * 3)
    del readings["AI-2 oxygen.PV"]
    found = tally(epoxidation(), readings)
    assert {one.counts for one in found if one.check == "air ingress" and "oxygen" not in one.instrument} == {
        (0, 3, 0, 0)
    }
    assert "air ingress" in not_checked(epoxidation(air=()), epoxidation().instruments[0])


# --- what all of them together depend on


def everything() -> Unit:
    unit = made_unit(
        made_instrument(largest_step=3.0, sampling="held"),
        made_channel("AI-2 n-butane", "n-butane", largest_step=1.0),
        made_channel("AI-2 isobutane", "isobutane"),
        operating=None,
    )
    return with_status(
        unit,
        **STATUS,
        settle=timedelta(minutes=7),
        certificate=(("AI-2 n-butane", 50.0), ("AI-2 isobutane", 5.0)),
        tolerance=0.02,
        sum_band=(98.0, 102.0),
    )


def rough(seed: int, days: int):
    """Readings with gaps, gas, spikes, repeats and a status that comes only when it changes."""
    random = np.random.default_rng(seed)
    minutes = np.flatnonzero(random.random(days * 1440) < 0.9)
    analysis = minutes // 6
    levels = np.round(random.normal(60, 0.4, analysis.max() + 1), 2)
    gas, stuck = random.random(levels.size) < 0.05, random.random(levels.size) < 0.1
    levels[stuck] = 60.0
    levels += np.where(random.random(levels.size) < 0.1, 4.0, 0.0)
    other = np.where(gas, 5.0, 100.2 - levels + random.choice([0.0, 2.5], levels.size))
    flow = random.choice([50.0, 50.5, 60.0], days * 1440, p=[0.6, 0.3, 0.1])[minutes]
    changes = np.sort(random.choice(days * 1440, 9 * days, replace=False))
    return {
        "FI-1.PV": made_series(minutes, flow),
        BUTANE: made_series(minutes, np.where(gas, 50.0, levels)[analysis]),
        ISOBUTANE: made_series(minutes, other[analysis]),
        "status.PV": made_series(changes, np.arange(changes.size) % 3 % 2),
    }


def test_a_cell_with_every_check_does_not_depend_on_the_chunk_it_was_made_in():
    unit = everything()
    for seed in range(6):
        readings = rough(seed, 2)
        whole = make_cells(unit, readings, MIDNIGHT, MIDNIGHT + 2 * DAY)
        assert len(np.unique(whole.condition)) >= 7
        edges = MIDNIGHT + np.sort(np.random.default_rng(seed).integers(0, 2 * DAY, 30))
        for first, last in zip(edges[:-1].tolist(), edges[1:].tolist(), strict=True):
            near = {
                tag: s.take((s.time >= first - look_back(unit) // US) & (s.time < last + reach(unit) // US))
                for tag, s in readings.items()
            }
            part = make_cells(unit, near, first, last)
            at = (whole.start >= first) & (whole.start < last)
            np.testing.assert_array_equal(part.condition, whole.condition[at])
            np.testing.assert_array_equal(part.value, whole.value[at])


def test_how_far_the_checks_look_by_hand():
    # Channel: half a cycle and 20 min held, 20 min stale; six cycles for stuck, three cycles and a gap of
    # 20 min for steps; 240 min of a status, 7 min of settling, two cycles beside other channels. The status
    # signal itself: half a minute and 240 min held, 240 min stale.
    unit = everything()
    own = 3 + 20 + 20 + (6 * 6 + 3 * 6 + 20) + 240 + 7 + 2 * 6
    assert look_back(unit) == timedelta(minutes=max(own, 0.5 + 240 + 240))
    # A cell of 10 min, 4 min of dead time, half a cycle, three cycles for stuck and two for spikes.
    assert reach(unit) == timedelta(minutes=10 + 4 + 3 + 5 * 6)


def test_checking_changes_no_reading():
    readings = rough(1, 1)
    copies = {tag: series.value.copy() for tag, series in readings.items()}
    screened(everything(), readings)
    tally(everything(), readings)
    for tag, series in readings.items():
        np.testing.assert_array_equal(series.value, copies[tag])


# --- on the invented plant, whose calibration windows are known


@pytest.fixture(scope="module")
def plant():
    """Sixty days of the demo's analyzer, kept by a historian that knows no bad quality; and the truth."""
    unit, put_in = load(UNIT_FILE), scenario.load()
    true = simulate(60, 7, start=put_in.start)
    results = meters.measure(true, unit, 8, calibrations=put_in.calibrations).results
    channels = [one for one in unit.instruments if one.analyzer == "AI-220"]
    readings = {str(one.tag): as_good(results[str(one.tag)]) for one in channels}
    readings["AI-220.CAL"] = as_good(meters.status(true, put_in.calibrations, channels[0].dead_time))
    return unit, readings, results["AI-220.O2"].mark == meters.CALIBRATION


def as_good(results) -> Series:
    """Everything stored, and everything of good quality."""
    count = len(results.time)
    good = np.full(count, 2, dtype=np.int8)
    return Series(results.time, results.value, good, np.zeros(count, np.int32), np.arange(count))


@pytest.mark.parametrize("way", ["status", "certificate"])
def test_calibration_is_found_in_995_of_1000_results_and_no_more_than_5_of_1000_good_ones_are_refused(
    plant, way
):
    # The figures that detection has to reach, with no help from the historian's quality.
    unit, readings, gas = plant
    (stated,) = unit.analyzers
    certificate = tuple((f"AI-220 {name}", value) for name, value in meters.CALIBRATION_GAS_PCT.items())
    by_gas = replace(stated, status=None, certificate=certificate, tolerance=0.02)
    told = replace(unit, analyzers=(stated if way == "status" else by_gas,))
    codes = screened(told, readings)
    assert gas.sum() > 200
    for at, one in enumerate(told.instruments):
        if one.analyzer == "AI-220":
            assert (codes[at][gas] == CALIBRATING).mean() >= 0.995, one.name
            refused = (codes[at][~gas] != GOOD) & (codes[at][~gas] != SUM_OUT_OF_BAND)
            assert refused.mean() <= 0.005, one.name
