"""Limits tried on the past: against hand arithmetic, against what passes stored, and as TOML read back."""

from __future__ import annotations

import json
from dataclasses import replace
from datetime import UTC, datetime, timedelta
from pathlib import Path

import numpy as np
import pytest

from ingest.cells import OPERATING
from ingest.errors import OutletError
from ingest.ledger import Store
from ingest.unit import Event, Watch
from ingest.unitfile import load
from monitor import desk, telltrials, trialchart, trials, tryout
from monitor.alerts import NORMAL, UNACKNOWLEDGED, Alert, State
from monitor.amounts import amount_names
from monitor.axes import LIGHT
from monitor.figures import figures_of
from monitor.trials import CAUGHT, EXPLAINED, FALSE, OPEN, SUPPRESSED, Known, Rows
from tests import page_made
from tests.test_cli import outlet
from tests.test_desk import LOW, START, UNIT, WATCH, export, passed
from tests.unitfiles_made import DEMO, loaded

HOUR = timedelta(hours=1)
BEGIN = datetime(2026, 4, 1, tzinfo=UTC)
RUNNING, DOWN = (OPERATING.index(word) for word in ("running", "down"))
LIMIT = replace(WATCH, name="", low=76.0, deadband=0.0, on_delay=timedelta(0), off_delay=timedelta(0))
MADE = page_made.unit()


def rows(low: dict[tuple[float, float], float], *, hours: float = 30.4375 * 24 + 1 / 6) -> Rows:
    """Ten-minute rows at 80, lower within spans of hours; always running. By default a month of them."""
    at_h = np.arange(round(hours * 6)) / 6
    value = np.full(len(at_h), 80.0)
    for (first, last), number in low.items():
        value[(at_h >= first) & (at_h < last)] = number
    end_us = np.int64(BEGIN.timestamp() * 1e6) + np.round(at_h * 3.6e9).astype(np.int64)
    return Rows(end_us, value, np.full(len(at_h), 0.2), np.full(len(at_h), RUNNING, np.int8))


def known(first_h: float, last_h: float, word: str = CAUGHT) -> Known:
    return Known(f"{word} {first_h:g}", BEGIN + first_h * HOUR, BEGIN + last_h * HOUR, word)


def test_what_is_known_is_caught_with_its_delay_and_what_is_not_known_is_false():
    # Below the limit from hours 100, 300 and 500 on; known is what began at 98 and at 600.
    found = rows({(100, 110): 75.0, (300, 301): 75.0, (500, 502): 74.0})
    trial = trials.tried(LIMIT, found, [known(98, 120), known(600, 620)])
    assert [one.word for one in trial.tried] == [CAUGHT, FALSE, FALSE]
    assert [one.late_h for one in trial.catches] == [pytest.approx(2.0), None]
    assert (trial.missed, trial.delay_h) == (1, pytest.approx(2.0))
    assert trial.running_h == pytest.approx(30.4375 * 24 + 1 / 6)
    assert trial.false_per_month == pytest.approx(2.0, abs=1e-3)  # two in a month of 30.4375 d


def test_an_on_delay_makes_it_later_by_as_much_and_drops_what_is_shorter():
    found = rows({(100, 110): 75.0, (300, 301): 75.0})
    trial = trials.tried(replace(LIMIT, on_delay=3 * HOUR), found, [known(98, 120)])
    assert len(trial.tried) == 1
    assert trial.delay_h == pytest.approx(5.0)


def test_an_episode_that_began_more_than_a_day_before_is_not_about_it():
    trial = trials.tried(LIMIT, rows({(100, 200): 75.0}), [known(125, 150)])
    assert [one.word for one in trial.tried] == [FALSE]
    assert trial.missed == 1
    trial = trials.tried(LIMIT, rows({(100, 200): 75.0}), [known(123, 150)])
    assert trial.delay_h == pytest.approx(-23.0)  # told 23 h before anybody put its beginning


def test_what_explains_or_is_not_judged_yet_is_no_false_alert_and_nothing_to_catch():
    found = rows({(100, 110): 75.0, (300, 301): 75.0})
    trial = trials.tried(LIMIT, found, [known(98, 120, EXPLAINED), known(299, 310, OPEN)])
    assert [one.word for one in trial.tried] == [EXPLAINED, OPEN]
    assert trial.catches == ()
    assert trial.false_per_month == 0.0


def test_what_is_suppressed_by_design_counts_neither_way():
    found = rows({(100, 110): 75.0})
    idle = np.where(np.arange(len(found.end_us)) // 6 < 200, DOWN, RUNNING).astype(np.int8)
    trial = trials.tried(LIMIT, replace(found, operating=idle), [known(98, 120)])
    assert [one.word for one in trial.tried] == [SUPPRESSED]
    assert (trial.missed, trial.count(FALSE)) == (1, 0)


def test_a_ramp_is_caught_later_the_wider_the_limit():
    # From hour 100 on it falls by 1 in an hour: at 80 - x the limit is passed x hours later, within one row.
    found = rows({}, hours=400)
    at_h = np.arange(len(found.end_us)) / 6
    noise = np.random.default_rng(3).uniform(-0.5, 0.5, len(at_h))
    value = 80 + noise * (at_h < 100) - np.clip(at_h - 100, 0, 20)
    points = trials.curve(LIMIT, replace(found, value=value), [known(100, 400)])
    assert sum(one.is_asked for one in points) == 1
    low = np.array([one.low for one in points])
    delay = np.array([one.delay_h for one in points])
    assert (np.diff(low) < 0).all()
    inside = low < 79.4
    assert np.allclose(delay[inside], 80 - low[inside], atol=0.2)
    assert all(one.missed == 0 for one in points)


def test_of_two_limits_both_move_and_never_meet():
    noise = np.random.default_rng(5).normal(0, 1, 6 * 400)
    found = replace(rows({}, hours=400), value=80 + noise)
    points = trials.curve(replace(LIMIT, low=79.0, high=81.0, deadband=0.5), found, [])
    assert all(one.low + 0.5 < one.high for one in points)
    assert {round(one.low + one.high, 6) for one in points} == {160.0}


def test_nothing_given_is_changed():
    found = rows({(100, 110): 75.0})
    before = found.value.copy()
    trials.curve(LIMIT, found, [known(98, 120)])
    assert (found.value == before).all()


ALERT = Alert(
    id="demo-1", unit="demo", watch="w", figure="yield on feed", window_h=8.0, side="low", limit=81.0,
    priority="high", first_crossed=BEGIN, raised=BEGIN + HOUR, cleared=BEGIN + 9 * HOUR, suppressed=False,
    past=False,
)  # fmt: skip


def test_what_people_said_decides_what_is_known():
    event = Event(BEGIN + 50 * HOUR, "calibration", "AI-220 set right", None)
    of = replace(MADE, events=(event, replace(event, kind="note", name="selectivity fell")))
    found = [
        (replace(ALERT, id=f"demo-{n}"), State(NORMAL, "A", None, cause, ()))
        for n, cause in enumerate(("reactor", "instrument", "data", "planned", "false"))
    ]
    found.append((replace(ALERT, id="demo-9", cleared=None), State(UNACKNOWLEDGED, "", None, "", ())))
    found.append((replace(ALERT, id="demo-10", withdrawn="gone"), State(NORMAL, "", None, "reactor", ())))
    told = {
        one.name.split(",")[0]: one
        for one in trials.known_of(of, found, BEGIN + 100 * HOUR, {"demo-1": BEGIN - HOUR})
    }
    assert {name: one.word for name, one in told.items()} == {
        "demo-0": CAUGHT, "demo-1": CAUGHT, "demo-2": EXPLAINED, "demo-3": EXPLAINED, "demo-9": OPEN,
        "calibration: AI-220 set right": EXPLAINED, "note: selectivity fell": CAUGHT,
    }  # fmt: skip
    assert told["demo-1"].first == BEGIN - HOUR  # since when its verdict has it
    assert told["demo-0"].first == BEGIN
    assert told["demo-9"].last == BEGIN + 100 * HOUR


@pytest.mark.parametrize(
    ("change", "why"),
    [
        ({"figure": "yeild"}, "there is no figure 'yeild'"),
        ({"window": timedelta(hours=5)}, "has no such window"),
        ({"low": None}, "there is no limit"),
        ({"high": 76.1, "deadband": 0.2}, "deadband of 0.2 is not below 76.1"),
        ({"test": "cusum"}, "a test for drift has no limits"),
    ],
)
def test_what_cannot_be_tried_is_told(change: dict[str, object], why: str):
    figures = figures_of(MADE, amount_names(MADE))
    with pytest.raises(OutletError, match=why):
        trials.proposed(MADE, figures, replace(LIMIT, **change))


@pytest.mark.parametrize(
    "watch",
    [
        replace(WATCH, name="yield, tried", low=79.55),
        replace(WATCH, name="both", low=70.0, high=90.25, count=2, among=3, steady=False),
        Watch(
            "drift, tried", "yield on feed", 24 * HOUR, None, None, "low", 0.0, timedelta(0), timedelta(0),
            steady=True, test="ewma", shift_pct=0.75, false_alarm_interval=timedelta(days=90), side="both",
        ),
    ],
    ids=["limit", "two limits", "drift"],
)  # fmt: skip
def test_the_lines_to_paste_are_read_back_as_the_same_watch(tmp_path: Path, watch: Watch):
    unit = loaded(tmp_path, f"{DEMO}\n" + "\n".join(telltrials.toml(watch)) + "\n")
    assert unit.watches[-1] == watch


def test_a_watch_tried_on_its_own_past_gives_the_episodes_that_passes_found(tmp_path: Path):
    store = tmp_path / "store"
    (alert,) = passed(
        store, [export(tmp_path, "1.csv", (0, 58), LOW), export(tmp_path, "2.csv", (58, 90), LOW)]
    )
    trial, _ = tryout.trial(store, UNIT, WATCH, (START, START + 100 * HOUR), now=START + 100 * HOUR)
    (tried,) = trial.tried
    stored = Store(store).snapshot().episodes("made").iloc[0]
    assert (tried.raised, tried.cleared) == (alert.raised, alert.cleared)
    assert tried.worst == pytest.approx(stored["worst"], rel=1e-6)  # figures are stored in single precision
    assert tried.word == OPEN
    desk.close(store, alert.id, "A. Moor", cause="reactor")
    trial, points = tryout.trial(store, UNIT, WATCH, (START, START + 100 * HOUR), now=START + 101 * HOUR)
    assert [one.word for one in trial.tried] == [CAUGHT]
    assert [one.missed for one in points if one.is_asked] == [0]
    with pytest.raises(OutletError, match="there are no figures in this span"):
        tryout.trial(store, UNIT, WATCH, (START - 99 * HOUR, START - 9 * HOUR), now=START)


def test_a_test_for_drift_is_tried_as_the_pass_would_run_it(tmp_path: Path):
    page_made.fill(tmp_path, MADE, days=3, end="2026-04-14T12:20Z", off=[], drop=0)
    drift = next(one for one in MADE.watches if one.test != "limits")
    span = tryout.whole_span(tmp_path, MADE, None)
    trial, points = tryout.trial(tmp_path, MADE, drift, span, now=BEGIN)
    assert (trial.tried, points) == ((), ())  # three days hold no healthy period to learn from


def test_the_curve_marks_the_limits_asked_for_and_says_what_it_shows():
    found = rows({(100, 110): 75.0, (300, 301): 75.0})
    found = replace(found, value=found.value + np.random.default_rng(1).normal(0, 0.5, len(found.value)))
    with_known = trialchart.chart(trials.curve(LIMIT, found, [known(98, 120)]), "%", LIGHT)
    assert with_known.data["trial"]["asked"].sum() == 1
    assert "mean delay" in with_known.alt
    assert "at least 76.0 %: 1.00 false a month, 2.0 h" in with_known.alt
    without = trialchart.chart(trials.curve(LIMIT, found, []), "%", LIGHT)
    assert "against limit [%]" in without.alt
    assert without.spec["layer"][0]["encoding"]["x"]["field"] == "limit"


def test_the_command_tells_episodes_other_limits_and_the_lines_to_paste(tmp_path: Path):
    page_made.fill(tmp_path / "store", MADE, days=10, end="2026-04-14T12:20Z", off=[], drop=2.4)
    words = ("try-limits", "--unit", page_made.DEMO, "--store", tmp_path / "store")
    limits = ("--figure", "yield on feed", "--window", "8h", "--low", "81", "--on-delay", "1h")
    done = outlet(*words, *limits, folder=tmp_path)
    assert done.returncode == 0, done.stderr
    assert "<- asked for" in done.stdout
    assert "low = 81.0" in done.stdout
    said = json.loads(
        outlet(*words, "--watch", "yield on feed 8 h", "--low", "60", "--json", folder=tmp_path).stdout
    )
    assert said["tried"] == []
    assert said["watch"]["priority"] == "high"  # the unit file's, but for the limit
    assert load(page_made.DEMO).watches[0].low == 81.0
    wrong = outlet(*words, "--watch", "none", folder=tmp_path)
    assert (wrong.returncode, wrong.stderr.count("\n")) == (2, 2)
