"""An alert with all that belongs to it: its sentence, its verdict, and which alerts are shown together."""

from __future__ import annotations

import json
from dataclasses import replace
from datetime import timedelta
from pathlib import Path

import pandas as pd

from monitor import desk, dossier
from monitor.alerts import CONDITIONS, NORMAL, UNACKNOWLEDGED, Alert, State
from monitor.amounts import amount_names
from monitor.board import Reading
from monitor.dossier import SHAPES, Present
from monitor.figures import figures_of
from monitor.verdict import INSTRUMENT
from tests import page_made
from tests.test_cli import outlet

UNIT = page_made.unit()
END = pd.Timestamp("2026-04-14T12:20Z")
EPISODES = page_made.episode_frame(page_made.clock(3, str(END)))
OPEN_ROW = EPISODES.iloc[0]
ALERT = Alert(
    id="demo-1", unit="demo", watch="yield on feed 8 h", figure="yield on feed", window_h=8.0, side="low",
    limit=81.0, priority="high", first_crossed=OPEN_ROW["first_crossed"].to_pydatetime(),
    raised=OPEN_ROW["raised"].to_pydatetime(), cleared=None, suppressed=False, past=False,
)  # fmt: skip
ASKING = State(UNACKNOWLEDGED, "", None, "", ())
DONE = State(NORMAL, "A. Moor", None, "", ())
PRESENT = Present(
    {figure.name: figure for figure in figures_of(UNIT, amount_names(UNIT))},
    {"yield on feed 8 h": Reading(79.95, 0.28, 1.0, "", END.to_pydatetime())},
    END.to_pydatetime(),
)


def test_every_condition_has_a_shape_of_its_own():
    assert set(SHAPES) == set(CONDITIONS)
    assert len(set(SHAPES.values())) == len(CONDITIONS)


def test_an_alert_has_the_verdict_worst_value_and_reading_of_its_own_episode():
    before = EPISODES.copy()
    (one,) = dossier.dossiers(UNIT, [(ALERT, ASKING)], EPISODES, PRESENT)
    assert one.verdict is not None
    assert one.verdict.word == INSTRUMENT
    # 14 April 04:10 UTC lies five hours and a cell before the end; Berlin is two hours ahead.
    assert one.said.replace("\u00a0", " ") == (
        "Yield of methacrolein on isobutene fed has been below 81.0 % since 14 Apr 09:10 CEST (5 h 10 min);"
        " now 79.95 ± 0.28 %, worst 79.90 % at 14 Apr 12:10 CEST."
    )
    pd.testing.assert_frame_equal(EPISODES, before)


def test_an_alert_that_was_raised_at_another_time_has_neither():
    other = replace(ALERT, raised=ALERT.raised - timedelta(hours=1))
    (one,) = dossier.dossiers(UNIT, [(other, ASKING)], EPISODES, PRESENT)
    assert one.verdict is None
    assert "worst" not in one.said
    assert dossier.verdicts([(other, ASKING)], EPISODES) == {}


def test_a_test_for_drift_is_told_against_what_was_expected():
    drift = replace(ALERT, watch="yield drift", limit=82.375947)
    (one,) = dossier.dossiers(UNIT, [(drift, ASKING)], EPISODES, PRESENT)
    assert "has been below the 82.38 % expected since" in one.said


def test_a_withdrawn_alert_is_told_as_over():
    gone = replace(ALERT, withdrawn="late or corrected data left no such episode")
    (one,) = dossier.dossiers(UNIT, [(gone, DONE)], EPISODES.iloc[:0], PRESENT)
    assert " was below 81.0 % " in one.said


def test_open_alerts_are_shown_and_older_ones_only_when_asked_for_and_not_too_old():
    old = replace(ALERT, id="demo-2", raised=ALERT.raised - timedelta(days=40))
    lately = replace(ALERT, id="demo-3", raised=ALERT.raised - timedelta(days=4))
    found = dossier.dossiers(UNIT, [(old, DONE), (lately, DONE), (ALERT, ASKING)], EPISODES, PRESENT)
    since = END.to_pydatetime() - timedelta(days=30)
    told = {
        every: [one.alert.id for group in dossier.shown(found, every=every, since=since) for one in group]
        for every in (False, True)
    }
    assert told == {False: ["demo-1"], True: ["demo-1", "demo-3"]}


def test_alerts_of_one_cause_are_one_group():
    second = replace(ALERT, id="demo-2", watch="selectivity", cause="reactor")
    found = dossier.dossiers(
        UNIT, [(replace(ALERT, cause="reactor"), ASKING), (second, ASKING)], EPISODES, PRESENT
    )
    (group,) = dossier.shown(found, every=False, since=END.to_pydatetime())
    assert len(group) == 2


def test_the_command_shows_the_verdict_of_an_alert(tmp_path: Path):
    page_made.fill(tmp_path, UNIT, days=3, end=str(END), off=[], drop=2.4)
    words = ("alerts", "show", "demo-1", "--unit", page_made.DEMO, "--store", tmp_path)
    assert (
        "An instrument moved, not the reactor: AI-220 methacrolein" in outlet(*words, folder=tmp_path).stdout
    )
    said = json.loads(outlet(*words, "--json", folder=tmp_path).stdout)
    assert said["verdict"]["suspects"][0]["name"] == "AI-220 methacrolein"
    assert [alert.id for alert in desk.known(tmp_path, "demo")] == ["demo-1", "demo-2"]
