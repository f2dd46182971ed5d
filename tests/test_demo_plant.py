"""The invented plant: its truth closes and its instruments err as the unit file states."""

from __future__ import annotations

from dataclasses import fields, replace
from datetime import date
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from demo_data import meters, plant, scenario
from demo_data.meters import CALIBRATION, GOOD
from demo_data.plant import STATE
from demo_data.scenario import MINUTE_US, Event
from ingest import chemistry
from ingest.readings import Series
from ingest.unitfile import load

UNIT = load(Path("config/demo.toml"))
PUT_IN = scenario.load()


@pytest.fixture(scope="module")
def truth():
    return plant.simulate(60, PUT_IN.seed, PUT_IN.events, start=PUT_IN.start)


@pytest.fixture(scope="module")
def measured(truth):
    return meters.measure(truth, UNIT, PUT_IN.seed + 1, calibrations=PUT_IN.calibrations)


def _fractions(truth, places):
    """Days since the first minute."""
    return (truth.time[places] - truth.time[0]) / scenario.DAY_US


def _event(kind):
    return next(scenario.of_kind(PUT_IN.events, kind))


# --- the truth ---------------------------------------------------------------------------------------------


def test_the_state_axis_is_that_of_the_unit_file():
    assert tuple((s.name, name) for s in UNIT.streams for name in s.species) == STATE


def test_declared_contents_are_those_the_true_contents_are_drawn_about():
    declared = {i.name: (i.value, i.systematic.floor) for i in UNIT.instruments if i.tag is None}
    assert declared == {
        "isobutane in feed": (plant.ISOBUTANE_PCT, plant.ISOBUTANE_SD_PCT),
        "oxygen in air": (plant.OXYGEN_PCT, plant.OXYGEN_SD_PCT),
    }


def test_atoms_close_at_every_minute_of_the_sixty_days(truth):
    formula = {s.name: s.formula for s in UNIT.species}
    atoms = chemistry.element_matrix(
        [chemistry.atoms(formula[name]) for _, name in STATE], ("C", "H", "O", "N")
    )
    sign = np.where([stream == "outlet" for stream, _ in STATE], 1.0, -1.0)
    fed = truth.flow_kmol_h[:, sign < 0].sum(axis=1)
    assert (np.abs(truth.flow_kmol_h @ (atoms * sign).T) <= 1e-9 * fed[:, None]).all()
    assert (truth.flow_kmol_h >= 0).all()


def test_the_spring_day_has_23_hours_and_every_other_day_24():
    # EU summer time: clocks go forward on the last Sunday of March (directive 2000/84/EC)
    hours = {day: len(scenario.minutes(date(2026, 3, day), 1)) / 60 for day in (28, 29, 30)}
    assert hours == {28: 24, 29: 23, 30: 24}


def test_the_same_seed_gives_the_same_truth_and_another_seed_does_not():
    one, same, other = (plant.simulate(3, seed) for seed in (7, 7, 8))
    np.testing.assert_array_equal(one.flow_kmol_h, same.flow_kmol_h)
    assert not np.isclose(one.flow_kmol_h, other.flow_kmol_h).all()


def test_an_event_changes_nothing_before_its_start():
    loss = Event("selectivity loss", day=1.5, hours=24, size=10)
    calm, hit = plant.simulate(3, 7), plant.simulate(3, 7, (loss,))
    differs = (calm.flow_kmol_h != hit.flow_kmol_h).any(axis=1)
    assert 1.5 < _fractions(calm, np.flatnonzero(differs)[0]) < 1.51
    assert _fractions(calm, np.flatnonzero(differs)[-1]) < 2.5


def test_a_kind_of_event_nobody_knows_is_refused():
    with pytest.raises(KeyError, match="eruption"):
        next(scenario.of_kind((), "eruption"))
    assert {e.kind for e in PUT_IN.events} == set(scenario.KINDS)


def test_load_stays_between_75_and_105_percent_and_moves(truth):
    load = truth.flow_kmol_h[:, :2].sum(axis=1) / plant.FEED_KMOL_H
    running = load[: 30 * 1440]
    assert running.min() >= 0.75 - 1e-9
    assert running.max() <= 1.05 + 1e-9
    assert np.ptp(running) > 0.15


def test_the_outage_lasts_twenty_hours_with_its_ramps_and_only_air_flows_meanwhile(truth):
    isobutene, air, steam = truth.flow_kmol_h[:, 0], truth.flow_kmol_h[:, 2], truth.flow_kmol_h[:, 4]
    off = np.flatnonzero(isobutene == 0)
    first, last = _fractions(truth, off[[0, -1]])
    event = _event("outage")
    assert first == pytest.approx(event.day + 2 / 24, abs=1e-6)
    assert last == pytest.approx(event.day + (20 - 3) / 24, abs=1e-6)
    assert len(off) == 15 * 60 + 1
    assert (steam[off] == 0).all()
    assert (air[off] > 0).all()


def test_the_feed_change_makes_the_feed_five_percent_richer(truth):
    richness = truth.flow_kmol_h[:, :2].sum(axis=1) / truth.flow_kmol_h[:, 2:5].sum(axis=1)
    day = _fractions(truth, slice(None))
    event = _event("feed change")
    before = richness[(day > event.day - 5) & (day < event.day)].mean()
    after = richness[(day > event.day + 0.1) & (day < event.day + 5)].mean()
    assert 100 * (after / before - 1) == pytest.approx(event.size, abs=0.2)


def test_cells_are_the_means_of_straight_lines_between_minutes():
    # by hand: a flow of 0, 1, 2 ... 20 kmol/h at minutes 0 ... 19 has means 5 and, held to the end, 14.95
    count = 20
    flow = np.repeat(np.arange(count, dtype=float)[:, None], len(STATE), axis=1)
    flat = np.zeros(count)
    start, mean = plant.cells(plant.Truth(np.arange(count) * MINUTE_US, flow, flat, flat, flat, ()))
    np.testing.assert_array_equal(start, [0, 10 * MINUTE_US])
    np.testing.assert_allclose(mean[:, 0], [5.0, 14.95])


def test_figures_of_amounts_are_the_ratios_worked_by_hand():
    # fed 100 isobutene, 5 left, 80 methacrolein, 1 + 2 + 3 + 4 + 10 = 20 unwanted: 95 %, 80/95, 80 %, 80/20
    amount = dict.fromkeys(STATE, 0.0)
    amount["isobutene feed", "isobutene"] = 100.0
    left = {
        "isobutene": 5.0,
        "methacrolein": 80.0,
        "methacrylic acid": 1.0,
        "acetic acid": 2.0,
        "acetone": 3.0,
        "carbon monoxide": 4.0,
        "carbon dioxide": 10.0,
    }
    amount |= {("outlet", name): kmol for name, kmol in left.items()}
    shown = plant.figures(np.array([list(amount.values())]))
    assert shown["conversion"][0] == pytest.approx(95.0)
    assert shown["selectivity on converted"][0] == pytest.approx(100 * 80 / 95)
    assert shown["yield on feed"][0] == pytest.approx(80.0)
    assert shown["overall selectivity to all unwanted"][0] == pytest.approx(4.0)
    assert shown["overall selectivity to carbon dioxide"][0] == pytest.approx(8.0)


def test_a_disturbance_has_the_stated_spread_and_memory():
    # first-order autoregression, any textbook: correlation over its time constant exp(-1) = 0.368
    series = plant.wander(np.random.default_rng(3), 400_000, sd=2.0, minutes=20)
    assert series.std() == pytest.approx(2.0, rel=0.03)
    assert np.corrcoef(series[:-20], series[20:])[0, 1] == pytest.approx(np.exp(-1), abs=0.02)


# --- the instruments ---------------------------------------------------------------------------------------


def test_every_instrument_shows_the_truth_when_it_has_no_error(truth):
    # by hand, from the definitions: kg/h of the feed, Nm3/h of air at 22.41397 m3/kmol (CODATA), ideal gas at
    # P and T, dry mole percent
    at = 5000
    flow = dict(zip(STATE, truth.flow_kmol_h[at], strict=True))
    left = {name: kmol for (stream, name), kmol in flow.items() if stream == "outlet"}
    dry = sum(left.values()) - left["water"]
    temperature, pressure = truth.outlet_degc[at] + 273.15, truth.outlet_kpa[at]
    expected = {
        "FI-201.PV": 56.108 * flow["isobutene feed", "isobutene"]
        + 58.124 * flow["isobutene feed", "isobutane"],
        "FI-202.PV": 22.413969545 * (flow["air", "oxygen"] + flow["air", "nitrogen"]),
        "FI-203.PV": 18.015 * flow["steam", "water"],
        "FI-210.PV": sum(left.values()) * 8.31446261815324 * temperature / pressure,
        "PI-211.PV": pressure,
        "TI-212.PV": temperature - 273.15,
        "AI-220.MAL": 100 * left["methacrolein"] / dry,
        "AI-220.N2": 100 * left["nitrogen"] / dry,
    }
    shown = {i.tag: meters.true_reading(i, truth, UNIT)[at] for i in UNIT.instruments if i.tag in expected}
    assert shown == pytest.approx(expected, rel=1e-9)


def test_readings_scatter_and_are_off_as_the_unit_file_states():
    # GUM (JCGM 100): standard deviations of what was drawn against the stated standard uncertainties
    steady = plant.simulate(4, 11)
    tag = "AI-220.MAL"
    channel = next(i for i in UNIT.instruments if i.tag == tag)
    shared = next(s for s in UNIT.shared if channel.name in s.instruments)
    means, scatter = [], []
    for seed in range(150):
        rows = meters.measure(steady, UNIT, seed).results[tag]
        right = meters.true_reading(channel, steady, UNIT)[::6][: len(rows.value)]
        ratio = rows.value / right - 1
        means.append(ratio.mean())
        scatter.append(ratio.std())
    level = right.mean()
    random = channel.random.relative + channel.random.floor / level
    systematic = np.hypot(channel.systematic.relative + channel.systematic.floor / level, shared.relative)
    assert np.mean(scatter) == pytest.approx(random, rel=0.02)
    # the spread of 150 draws is known to 1/sqrt(2 * 149) = 6 %, three of which are allowed
    assert np.std(means) == pytest.approx(systematic, rel=0.18)


def test_the_shared_error_moves_all_channels_of_the_analyzer_together():
    steady = plant.simulate(1, 11)
    exact = {f.name: 0.0 for f in fields(UNIT.instruments[0].random)}
    none = type(UNIT.instruments[0].random)(**exact)
    perfect = tuple(replace(i, random=none, systematic=none) for i in UNIT.instruments)
    only_span = replace(UNIT, instruments=perfect)
    given = meters.measure(steady, only_span, 5)
    factor = 1 + given.drawn[UNIT.shared[0].name] * UNIT.shared[0].relative
    for instrument in perfect:
        if instrument.tag and instrument.analyzer:
            rows = given.results[instrument.tag]
            right = meters.true_reading(instrument, steady, UNIT)[::6][: len(rows.value)]
            np.testing.assert_allclose(rows.value, right * factor, atol=0.51e-4)  # four decimals are kept


def test_an_analyzer_result_is_of_the_sample_taken_four_minutes_before():
    # a step in the feed: the first result that shows it is of a sample drawn after it
    steady = plant.simulate(1, 11)
    instrument = next(i for i in UNIT.instruments if i.tag == "AI-220.N2")
    rows = meters.measure(steady, UNIT, 5).results["AI-220.N2"]
    assert rows.time[0] == steady.time[0] + 4 * MINUTE_US
    assert set(np.diff(rows.time)) == {6 * MINUTE_US}
    stepped = steady.flow_kmol_h.copy()
    stepped[601:] = stepped[600]
    stepped[601:, STATE.index(("outlet", "nitrogen"))] *= 0.5
    late = meters.measure(replace(steady, flow_kmol_h=stepped), UNIT, 5).results["AI-220.N2"]
    differs = np.flatnonzero(np.abs(late.value / rows.value - 1) > 0.05)
    assert late.time[differs[0]] == steady.time[0] + (606 + 4) * MINUTE_US
    assert instrument.dead_time.total_seconds() == 240


def test_the_stuck_analyzer_repeats_its_last_result_on_every_channel(measured, truth):
    start, end = scenario.span_us(_event("analyzer stuck"), truth.time[0])
    for tag, rows in measured.results.items():
        inside = (rows.time >= start) & (rows.time < end)
        if tag.startswith("AI-220"):
            last = rows.value[rows.time < start][-1]
            assert inside.sum() == 70  # 7 h of 6 min
            assert (rows.value[inside] == last).all()
            assert rows.value[rows.time >= end][0] != last
        else:
            assert len(set(rows.value[inside])) > 50


def test_the_drifting_channel_ends_five_percent_low_and_is_set_right_by_the_calibration(measured, truth):
    event = _event("channel drift")
    start, end = scenario.span_us(event, truth.time[0])
    plain = meters.measure(truth, UNIT, PUT_IN.seed + 1, calibrations=PUT_IN.calibrations, events=())
    for tag, rows in measured.results.items():
        healthy = plain.results[tag].value
        hour = 60 * MINUTE_US
        near_end = (rows.time > end - 6 * hour) & (rows.time < end)
        size = event.size if tag == event.tag else 0.0
        assert 100 * (rows.value[near_end] / healthy[near_end] - 1).mean() == pytest.approx(size, abs=0.15)
        around = ((rows.time > start - 24 * hour) & (rows.time < start)) | (rows.time >= end)
        np.testing.assert_array_equal(rows.value[around], healthy[around])
    calibrating = scenario.calibrating(np.array([end - MINUTE_US, end]), PUT_IN.calibrations)
    assert calibrating.all()


def test_during_calibration_results_are_of_the_gas_and_marked(measured, truth):
    rows = measured.results["AI-220.MAL"]
    off = rows.mark == CALIBRATION
    assert rows.value[off] == pytest.approx(meters.CALIBRATION_GAS_PCT["methacrolein"], rel=0.08)
    local = pd.to_datetime(rows.time[off], unit="us", utc=True).tz_convert("Europe/Berlin")
    # 06:10 for 18 min every day; results come 4 min later, on 6 min marks; on Wednesdays 10:00 for 60 min
    clock = local.hour * 60 + local.minute
    daily = (clock >= 6 * 60 + 10) & (clock < 6 * 60 + 32)
    weekly = (local.day_of_week == 2) & (clock >= 600) & (clock < 664)
    assert (daily | weekly).all()
    assert daily.sum() >= 3 * 60
    assert (
        len(set(local[weekly].date)) == 9
    )  # Wednesdays of March and April 2026: 4, 11, 18, 25; 1, 8, 15, 22, 29


def test_the_status_is_one_exactly_while_results_are_of_the_gas(measured, truth):
    dead_time = next(i.dead_time for i in UNIT.instruments if i.analyzer)
    status = meters.status(truth, PUT_IN.calibrations, dead_time)
    rows = measured.results["AI-220.CO"]
    at_result = status.value[np.searchsorted(status.time, rows.time)]
    np.testing.assert_array_equal(at_result == 1, rows.mark == CALIBRATION)


def test_measuring_leaves_the_truth_as_it_was(truth):
    before = truth.flow_kmol_h.copy()
    meters.measure(truth, UNIT, 1, calibrations=PUT_IN.calibrations)
    np.testing.assert_array_equal(truth.flow_kmol_h, before)


def test_the_archive_form_has_good_numbers_and_bad_blanks(measured):
    readings = meters.as_readings(measured.results)
    series = readings["TI-212.PV"]
    assert isinstance(series, Series)
    assert np.isnan(series.value).sum() == 30  # half an hour without a number
    assert len(series.time) == len(measured.results["TI-212.PV"].time) - 12  # of 12 min nothing was stored
    np.testing.assert_array_equal(np.isnan(series.value), series.quality == 0)


def test_good_readings_lie_inside_their_ranges_while_the_plant_runs(measured, truth):
    start, end = scenario.span_us(_event("outage"), truth.time[0])
    for instrument in UNIT.instruments:
        if instrument.tag in measured.results:
            rows = measured.results[instrument.tag]
            use = (rows.mark == GOOD) & ((rows.time < start) | (rows.time > end + 4 * MINUTE_US))
            assert rows.value[use].min() > instrument.low
            assert rows.value[use].max() < instrument.high
