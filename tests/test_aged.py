"""Ageing out of a store, on the demo plant, and how it is told."""

from __future__ import annotations

import json
from dataclasses import replace
from datetime import date, timedelta

import numpy as np
import pytest
from click.testing import CliRunner

from demo_data.exports import UNIT_FILE, make
from ingest.errors import StoreError
from ingest.ledger import Store
from ingest.unit import Event
from ingest.unitfile import load
from monitor.aged import Aged, Limit, aged
from monitor.ageing import Ageing, Reach
from monitor.cli import outlet
from monitor.run import run_pass
from monitor.tellageing import told
from monitor.trendtests import Trend

UNIT = load(UNIT_FILE)


@pytest.fixture(scope="module")
def store(tmp_path_factory):
    folder = tmp_path_factory.mktemp("plant")
    made = make(folder)
    run_pass([UNIT], folder / "store", made.exports, progress=lambda *_: None, settle=timedelta(0))
    return folder / "store"


def test_ageing_is_that_since_the_last_event_that_changed_the_level(store):
    [one] = aged(store, UNIT)
    assert (one.figure, one.why) == ("yield on feed", "")
    assert (one.first, one.last) == (date(2026, 4, 1), date(2026, 4, 29))
    [whole] = aged(store, replace(UNIT, events=()))
    assert whole.first == date(2026, 3, 1)


def test_rates_are_per_month_and_per_tonne_of_what_was_made(store):
    # By hand: 106 kmol/h at 90 % load, 82 % yield and 70 kg/kmol are 5.5 t/h, some 4,000 t in 30 days.
    # The fall within two days is no ageing: a line through it is not bounded, and is told so.
    [one] = aged(store, UNIT)
    assert one.rates is not None
    assert one.rates.per_tonne is not None
    assert one.rates.per_month.slope < 0.0
    assert 2500 < one.rates.per_month.slope / one.rates.per_tonne.slope < 5500


def test_a_limit_that_is_passed_is_already_there(store):
    # the yield never was above 84 %
    far = replace(UNIT.watches[0], low=95.0)
    [one] = aged(store, replace(UNIT, watches=(far, *UNIT.watches[1:])))
    [limit] = one.limits
    assert (limit.value, limit.side) == (95.0, "low")
    assert [reach.latest for reach in limit.reach] == [0, 0]


def test_after_a_new_catalyst_nothing_is_said_until_there_is_a_newer_healthy_period(store):
    change = Event(UNIT.healthy.last + timedelta(days=3), "catalyst change", "new charge", None)
    [one] = aged(store, replace(UNIT, events=(*UNIT.events, change)))
    assert one.rates is None
    assert "write a newer one" in one.why


def test_too_short_a_stretch_and_an_expectation_not_yet_learnt_are_told(store):
    late = Event(UNIT.events[-1].at + timedelta(days=20), "calibration", "again", "AI-220")
    [one] = aged(store, replace(UNIT, events=(*UNIT.events, late)))
    assert "too few days" in one.why
    renamed = replace(UNIT.watches[0], name="another", test="cusum", window=timedelta(hours=1))
    [other] = aged(store, replace(UNIT, watches=(renamed,)))
    assert other.why == "no expectation has been learnt yet"


def test_a_store_without_the_unit_says_what_to_do(tmp_path):
    with Store(tmp_path / "empty").begin():
        pass
    with pytest.raises(StoreError, match="holds no cells of demo"):
        aged(tmp_path / "empty", UNIT)


def test_the_command_prints_lines_for_people_and_an_object_for_programs(store):
    arguments = ["ageing", "--unit", str(UNIT_FILE), "--store", str(store)]
    said = CliRunner().invoke(outlet, arguments)
    assert said.exit_code == 0
    assert said.output.startswith("yield on feed, as at its usual operating point, 1 Apr 2026 to 29 Apr 2026")
    assert "\n  down to 81.0, straight line: 29 Apr 2026 to " in said.output
    table = json.loads(CliRunner().invoke(outlet, [*arguments, "--json"]).output)
    assert table["figures"][0]["first"] == "2026-04-01"


def trend(low: float, slope: float, high: float) -> Trend:
    return Trend(0.0, 1.0, 0.0, 1.0, 0.0, slope, low, high, 440.0)


def test_ranges_of_dates_are_told_with_their_open_ends():
    reach = (Reach("straight line", 100, 400), Reach("levelling out", 90, None))
    limit, never = Limit(81.0, "low", reach), Limit(90.0, "high", (Reach("straight line", None, None),))
    rates = Ageing(trend(-0.4, -0.3, -0.2), trend(-2e-4, -1e-4, 5e-5))
    first, last = date(2026, 1, 1), date(2026, 12, 31)
    assert list(told([Aged("yield on feed", "w", first, last, rates, (limit, never), "")])) == [
        "yield on feed, as at its usual operating point, 1 Jan 2026 to 31 Dec 2026 (365 days)",
        "  in 30 days -0.30 % of it (-0.40 to -0.20)",
        "  per 1,000 t made -0.10 % of it (-0.20 to +0.05; may be none)",
        "  down to 81.0, straight line: 10 Apr 2027 to 4 Feb 2028",
        "  down to 81.0, levelling out: 31 Mar 2027 to later than in 5 years",
        "  up to 90.0, straight line: not within 5 years",
    ]


def test_a_rate_that_the_data_do_not_bound_is_told_as_such():
    rates = Ageing(trend(-np.inf, -0.3, np.inf), None)
    day = date(2026, 1, 1)
    lines = list(told([Aged("yield on feed", "w", day, day, rates, (), "")]))
    assert lines[1] == "  in 30 days -0.30 % of it (its interval is not bounded)"


def test_a_unit_without_drift_watches_is_told_what_to_write():
    assert list(told([])) == [
        'No figure has a drift watch: write test = "cusum" in a [[watch]] and a section [healthy].'
    ]
