"""The view Instruments tells of the demo plant what was put into it."""

from __future__ import annotations

import re
from collections.abc import Iterator
from datetime import timedelta
from html import unescape
from pathlib import Path

import pytest
import streamlit as st
from playwright.sync_api import Page, sync_playwright

from demo_data.exports import UNIT_FILE, make
from ingest.unitfile import load
from monitor.run import run_pass
from tests.test_page import charts, shown, text
from tests.test_page_browser import KNOWN, QUIET, _painted, serving

INSTRUMENTS = "from monitor.page import instruments, shell\nshell.style()\ninstruments.view()\n"
# demo_data/scenario.toml: on day 10.52 (11 March, 12:29) all channels of the analyzer repeat for seven hours.
STUCK = {"span": "from\u2013to", "from": "2026-03-05T00:00", "to": "2026-03-11T15:00"}


@pytest.fixture(scope="module")
def store(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Twelve days of the demo plant: a lost reading, a gap of the historian, a stuck analyzer."""
    folder = tmp_path_factory.mktemp("instruments")
    files = make(folder / "plant", days=12).exports
    run_pass(
        [load(UNIT_FILE)], folder / "store", files, progress=lambda *_: None, settle=timedelta(0)
    )  # fmt: skip
    return folder / "store"


@pytest.fixture(autouse=True)
def _no_cache_from_another_test() -> Iterator[None]:
    yield
    st.cache_data.clear()
    st.cache_resource.clear()


def words(html: str) -> str:
    return re.sub(r"\s+", " ", unescape(re.sub(r"<[^>]+>", " ", html)).replace("\u202f", " "))


def test_the_stuck_analyzer_is_to_be_looked_at_first(monkeypatch, store):
    said = words(text(shown(monkeypatch, store, INSTRUMENTS, **STUCK)))
    first = said[said.index("Which to look at first") : said.index("Condition over time")]
    assert re.search(
        r"AI-220, all channels \u25b2 refused : stuck at the end of the span, out since 11 Mar 12:", first
    )
    assert "FI-" not in first


def test_a_day_on_which_nothing_is_wrong_says_so(monkeypatch, store):
    said = words(text(shown(monkeypatch, store, INSTRUMENTS, span="24 h")))
    assert "Nothing speaks against any instrument in this span." in said


def test_calibrations_dead_time_votes_and_what_cannot_be_told_apart_are_told(monkeypatch, store):
    said = words(text(shown(monkeypatch, store, INSTRUMENTS, **STUCK)))
    # By hand: a check each day at 06:10 (seven), and the long one of Wednesday 11 March at 10:00.
    assert re.search(r"AI-220 8 \d\.\d 11 Mar", said)
    assert "AI-220 4 min 4 min ± 0.5 \u25cf as declared" in said
    assert "FI-203, FI-210" in said
    assert "contradicted what most of them said" in said


def test_the_checks_say_what_they_refused_and_what_they_do_not_look_at(monkeypatch, store):
    said = words(text(shown(monkeypatch, store, INSTRUMENTS, **STUCK)))
    assert re.search(r"\u25c6 calibrating \d+", said)
    assert re.search(r"\u25b2 bad \d+", said)
    assert "no longest_repeat is stated" in said


def test_the_strips_name_what_was_out_and_draw_every_instrument_with_a_tag(monkeypatch, store):
    test = shown(monkeypatch, store, INSTRUMENTS, span="all")
    (chart,) = charts(test)
    tagged = [one.name for one in load(UNIT_FILE).instruments if one.tag is not None]
    assert chart["layer"][1]["encoding"]["y"]["sort"] == tagged
    assert "refused at times" in test.get("vega_lite_chart")[0].proto.alt


def test_an_empty_store_says_how_to_fill_it(monkeypatch, tmp_path):
    assert "outlet run" in text(shown(monkeypatch, tmp_path / "nothing", INSTRUMENTS))


@pytest.mark.browser
def test_the_view_is_drawn_and_fits_a_screen_and_a_phone(chromium: str, store: Path):
    with serving(store) as port, sync_playwright() as play:
        browser = play.chromium.launch(executable_path=chromium, args=QUIET)
        for wide, scheme in ((True, "light"), (False, "dark")):
            size = {"width": 1920, "height": 1080} if wide else {"width": 390, "height": 844}
            context = browser.new_context(viewport=size, color_scheme=scheme, is_mobile=not wide)
            page: Page = context.new_page()
            said: list[str] = []
            page.on("console", lambda m, said=said: said.append(m.text) if m.type == "error" else None)
            page.goto(f"http://127.0.0.1:{port}/instruments")
            page.get_by_text("Why checks are not made").wait_for(timeout=60_000)
            page.wait_for_selector("canvas", timeout=30_000)
            page.wait_for_timeout(1000)
            over = page.evaluate(
                "(e => e.scrollWidth - e.clientWidth)(document.querySelector('[data-testid=stMain]'))"
            )
            assert over <= 0
            assert _painted(page, 0)
            assert [one for one in said if not one.startswith(KNOWN[0]) and KNOWN[1] not in one] == []
            context.close()
        browser.close()


@pytest.mark.browser
def test_every_view_can_be_reached_from_every_other_that_has_a_span(chromium: str, store: Path):
    with serving(store) as port, sync_playwright() as play:
        browser = play.chromium.launch(executable_path=chromium, args=QUIET)
        page = browser.new_page()
        page.goto(f"http://127.0.0.1:{port}/trend")
        seven = page.get_by_role("radiogroup", name="Span").get_by_role("radio", name="7 d")
        drawn = {"Trend": "Draw across a chart", "Balance": "Raw closures", "Instruments": "Condition over"}
        page.get_by_text(drawn["Trend"]).first.wait_for(timeout=30_000)
        for view in ("Balance", "Instruments", "Trend", "Instruments", "Balance", "Trend"):
            page.get_by_role("link", name=view, exact=True).click()
            page.get_by_text(drawn[view]).first.wait_for(timeout=30_000)
            assert seven.get_attribute("aria-checked") == "true", view
        browser.close()
