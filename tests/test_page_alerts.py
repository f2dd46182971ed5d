"""The view Alerts and the shift's note: what they show, and that each act writes one line, once."""

from __future__ import annotations

import json
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path

import pytest
import streamlit as st
from playwright.sync_api import Page, sync_playwright
from streamlit.testing.v1 import AppTest

from ingest import journal
from ingest.journal import Line
from monitor import desk
from monitor.page import acts
from tests import page_made
from tests.source import ROOT
from tests.test_page import END, charts, shown, text
from tests.test_page_browser import QUIET, serving

ALERTS = "from monitor.page import alerts\nalerts.view()\n"
NOW = "from monitor.page import now\nnow.view()\n"
ID = "demo-1"  # the open one; demo-2 ended a day before the end


@pytest.fixture
def store(tmp_path: Path) -> Path:
    page_made.fill(tmp_path / "store", page_made.unit(), days=10, end=END, off=[], drop=2.4)
    return tmp_path / "store"


@pytest.fixture(autouse=True)
def _no_cache_from_another_test() -> Iterator[None]:
    yield
    st.cache_data.clear()
    st.cache_resource.clear()


def named(test: AppTest, who: str = "A. Moor") -> AppTest:
    """The view with a name typed."""
    return test.text_input(key=acts.NAME).input(who).run()


def lines(store: Path) -> tuple[Line, ...]:
    return journal.lines(store, unit="demo")


def pressed(test: AppTest, label: str) -> AppTest:
    (found,) = [one for one in test.button if one.label == label]
    return found.click().run()


def test_the_worst_alert_is_open_with_its_verdict_evidence_and_what_to_check(monkeypatch, store):
    test = shown(monkeypatch, store, ALERTS)
    said = text(test)
    assert "1 alert, worst first" in said
    assert "unacknowledged</span>, high priority" in said
    assert "An instrument moved, not the reactor: AI-220 methacrolein" in said
    assert "the span gas of AI-220 methacrolein" in said
    assert "a laboratory sample of the outlet" in said
    assert "without AI-220 methacrolein" in said
    assert "82.40" in said  # the yield without it, as the verdict of the made store has it
    assert "methacrolein lost: 210 kg/h" in said
    assert len(charts(test)) == 1


def test_all_of_thirty_days_shows_what_is_back_to_normal_as_well(monkeypatch, store):
    said = text(shown(monkeypatch, store, ALERTS, alerts="all of 30 d"))
    assert "2 alerts, worst first" in said
    assert "Closure of carbon was above 103.0 %" in said


def test_taking_writes_one_line_with_the_name_and_shows_it(monkeypatch, store):
    test = pressed(named(shown(monkeypatch, store, ALERTS)), "Take")
    assert [(line.act, line.who, line.subject) for line in lines(store)] == [("acknowledge", "A. Moor", ID)]
    assert "acknowledged by A. Moor" in text(test)
    assert acts.WRITTEN in text(test)
    assert "Take" not in [one.label for one in test.button]


def test_nothing_is_written_without_a_name(monkeypatch, store):
    test = pressed(shown(monkeypatch, store, ALERTS), "Take")
    assert lines(store) == ()
    assert "write your name" in text(test)


def test_the_second_of_two_clicks_writes_nothing_and_a_stale_page_is_told(monkeypatch, store):
    first, second = (named(shown(monkeypatch, store, ALERTS), who) for who in ("A. Moor", "B. Fell"))
    again = named(shown(monkeypatch, store, ALERTS))
    pressed(first, "Take")
    assert acts.WRITTEN in text(pressed(again, "Take"))
    assert "A. Moor wrote about it in between" in text(pressed(second, "Take"))
    assert len(lines(store)) == 1


def test_shelving_wants_a_reason_and_is_shown_with_its_end(monkeypatch, store):
    test = named(shown(monkeypatch, store, ALERTS))
    refused = pressed(test, "Shelve")
    assert "without a reason" in text(refused)
    refused.text_area(key=f"shelve {ID} 0 words").input("span gas is being changed")
    refused.selectbox(key=f"shelve {ID} 0 hours").select(2.0)
    test = pressed(refused, "Shelve")
    (line,) = lines(store)
    assert (line.act, line.note) == ("shelve", "span gas is being changed")
    assert "shelved by A. Moor until" in text(test)
    test = pressed(test, "Unshelve")
    assert [one.act for one in lines(store)] == ["shelve", "unshelve"]


def test_closing_names_the_cause_and_the_health_counts_it(monkeypatch, store):
    test = named(shown(monkeypatch, store, ALERTS))
    test.selectbox(key=f"close {ID} 0 cause").select("instrument")
    test = pressed(test, "Close")
    (line,) = lines(store)
    assert (line.act, line.detail["cause"]) == ("close", "instrument")
    said = text(test)
    assert "closed as instrument by A. Moor" in said
    assert "<th scope='row'>closed</th><td>1</td>" in said


def test_what_people_typed_is_text_and_no_markup(monkeypatch, store):
    test = named(shown(monkeypatch, store, ALERTS), "<b>A</b>")
    test.text_area(key=f"note {ID} 0 words").input("<script>alert(1)</script>")
    said = text(pressed(test, "Note"))
    assert "<script>" not in said
    assert "<b>A</b>" not in said
    assert "&lt;script&gt;" in said


def test_an_alert_can_be_closed_on_the_page_and_another_opened(monkeypatch, store):
    test = shown(monkeypatch, store, ALERTS, alerts="all of 30 d")
    test.button(key="open demo-2").click().run()
    assert "None yet." in text(test)
    assert test.query_params["alert"] == "demo-2"
    test.button(key="open demo-2").click().run()
    assert charts(test) == []


def test_a_calm_unit_says_so(monkeypatch, tmp_path):
    page_made.fill(tmp_path / "calm", page_made.unit(), days=3, end=END, off=[], drop=0)
    assert "No alert is open" in text(shown(monkeypatch, tmp_path / "calm", ALERTS))


def test_a_note_is_kept_with_what_stood_and_is_shown_to_this_shift(monkeypatch, store):
    test = named(shown(monkeypatch, store, NOW))
    (box,) = [one for one in test.text_area if one.label == "For the next shift"]
    box.input("AI-220: span gas ordered.\nWatch the yield.")
    test = pressed(test, "Leave the note")
    (line,) = lines(store)
    assert (line.act, line.who, line.note) == (
        "shift note", "A. Moor", "AI-220: span gas ordered.\nWatch the yield.",
    )  # fmt: skip
    assert line.detail["list"]["open"][0].startswith(f"{ID}, high priority, unacknowledged")
    assert "AI-220: span gas ordered.<br>Watch the yield." in text(test)


def test_an_empty_note_is_not_written(monkeypatch, store):
    test = pressed(named(shown(monkeypatch, store, NOW)), "Leave the note")
    assert lines(store) == ()
    assert "The note is empty" in text(test)


def test_the_next_shift_sees_the_note_of_the_last_one(monkeypatch, store):
    kept = {
        "from": "2026-04-14T04:00+00:00",
        "to": "2026-04-14T12:00+00:00",
        "list": {"out": ["FI-201: stuck"]},
    }
    journal.write(
        store, who="B. Fell", act="shift note", unit="demo", subject="shift 2026-04-14T04:00+00:00",
        note="Load goes up at ten.", detail=kept,
    )  # fmt: skip
    said = text(shown(monkeypatch, store, NOW))
    assert "Note of shift 14 Apr 06:00 to 14:00 CEST" in said
    assert "Load goes up at ten." in said
    assert "FI-201: stuck" in said


def test_limits_are_tried_on_the_page_and_nothing_is_written(monkeypatch, store):
    before = page_made.DEMO.read_bytes()
    test = shown(monkeypatch, store, ALERTS, alert="none")
    test.number_input(key="try Low yield on feed 8 h").set_value(80.5)
    test = pressed(test, "Try")
    assert "1 episode from" in text(test)
    assert f"not judged yet ({ID}, not closed yet)" in text(test)
    assert "low = 80.5" in test.code[0].value
    (curve,) = charts(test)
    assert curve["layer"][0]["data"] == {"name": "trial"}
    assert (page_made.DEMO.read_bytes(), lines(store)) == (before, ())


def test_limits_that_cannot_be_tried_are_told_with_what_to_do(monkeypatch, store):
    test = shown(monkeypatch, store, ALERTS, alert="none")
    test.number_input(key="try Low yield on feed 8 h").set_value(None)
    said = text(pressed(test, "Try"))
    assert "there is no limit" in said
    assert "Write a low or a high one, or both." in said


def test_a_shelved_alert_stands_on_the_first_view_with_its_end(monkeypatch, store):
    desk.shelve(store, ID, "A. Moor", reason="span gas is being changed")
    said = text(shown(monkeypatch, store, NOW))
    assert "shelved by A. Moor until" in said
    assert "<li class='rest'>" in said
    assert "<dt>shelved or out of service</dt>" in said


@pytest.fixture(scope="module")
def browser_page(chromium: str, tmp_path_factory: pytest.TempPathFactory) -> Iterator[tuple[Page, Path]]:
    """The view Alerts of a real server in a real browser, and the store behind it."""
    folder = tmp_path_factory.mktemp("alerts") / "store"
    page_made.fill(folder, page_made.unit(), days=10, end=END, off=[], drop=2.4)
    with serving(folder) as port, sync_playwright() as play:
        opened = play.chromium.launch(executable_path=chromium, args=QUIET)
        page = opened.new_page(viewport={"width": 1920, "height": 1080})
        page.goto(f"http://127.0.0.1:{port}/alerts")
        page.get_by_role("button", name="Take").wait_for(timeout=30_000)
        yield page, folder
        opened.close()


@pytest.mark.browser
def test_two_quick_clicks_in_a_real_browser_write_one_line_that_the_command_line_sees(browser_page):
    page, folder = browser_page
    page.get_by_label("Your name, for the journal").fill("A. Moor")
    page.get_by_label("Your name, for the journal").press("Enter")
    page.wait_for_timeout(1500)
    page.get_by_role("button", name="Take").dblclick()
    page.get_by_text("acknowledged by A. Moor").first.wait_for(timeout=15_000)
    page.wait_for_timeout(1500)
    page.reload()
    page.get_by_text("acknowledged by A. Moor").first.wait_for(timeout=15_000)
    assert [(line.act, line.who) for line in journal.lines(folder, unit="demo")] == [
        ("acknowledge", "A. Moor")
    ]
    command = [
        sys.executable, "-m", "monitor", "alerts", "list", "--unit", str(page_made.DEMO),
        "--store", str(folder), "--json",
    ]  # fmt: skip
    done = subprocess.run(command, cwd=ROOT, capture_output=True, text=True, check=True)
    (alert,) = json.loads(done.stdout)["units"]["demo"]["alerts"]
    assert (alert["id"], alert["condition"], alert["by"]) == (ID, "acknowledged", "A. Moor")
