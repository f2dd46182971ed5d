"""The view Intake tells what the ledger holds: counts, evidence, what was set aside, and when it came."""

from __future__ import annotations

import re
from collections.abc import Iterator
from datetime import UTC, datetime, timedelta
from html import unescape

import pytest
import streamlit as st
from playwright.sync_api import Page, sync_playwright
from streamlit.testing.v1 import AppTest

from demo_data.exports import UNIT_FILE
from ingest.ledger import Store
from monitor import deliveries, wording
from tests import intake_made
from tests.test_page import charts, shown, text
from tests.test_page_browser import KNOWN, QUIET, serving

INTAKE = "from monitor.page import intake, shell\nshell.style()\nintake.view()\n"
PAGE_OF = 25


@pytest.fixture(scope="module")
def store(tmp_path_factory: pytest.TempPathFactory) -> Store:
    """Two days of the demo plant with a broken file and one with refused rows, and 60 deliveries before."""
    made = intake_made.taken_in(tmp_path_factory.mktemp("intake"), days=2)
    now = datetime.now(UTC)
    intake_made.delivered(made, [now - timedelta(hours=4 * n) for n in range(1, 70) if not 20 < n < 32])
    return made


@pytest.fixture(autouse=True)
def _no_cache_from_another_test() -> Iterator[None]:
    yield
    st.cache_data.clear()
    st.cache_resource.clear()


def intake(monkeypatch: pytest.MonkeyPatch, store: Store, **query: str) -> AppTest:
    return shown(monkeypatch, store.folder, INTAKE, **query)


def words(test: AppTest) -> str:
    return re.sub(r"\s+", " ", unescape(re.sub(r"<[^>]+>", " ", text(test))).replace("\u202f", " "))


def number(count: int) -> str:
    return wording.number(count, 0).replace("\u202f", " ")


def test_every_export_of_a_sheet_stands_there_with_its_sum(monkeypatch, store):
    said = words(intake(monkeypatch, store))
    newest = sorted(store.exports(), key=lambda one: (one.taken_at, one.number), reverse=True)[:PAGE_OF]
    for export in newest:
        assert export.name in said
        if export.status == "taken":
            account = deliveries.account_of(export)
            places = " + ".join(f"{number(count)} {place}" for count, place in deliveries.sum_of(account))
            assert f"{number(account.readings)} readings = {places}" in said
            assert sum(count for count, _ in deliveries.sum_of(account)) == account.readings


def test_what_was_rejected_is_told_with_evidence_reason_and_remedy(monkeypatch, store):
    said = words(intake(monkeypatch, store, named="night-shift"))
    (export,) = deliveries.named(store.exports(), "night-shift.csv")
    account = deliveries.account_of(export)
    assert account.rejected == 4  # by hand: '5700 kg', 'inf' and two readings of the row without a time
    for what, remedy, rows in deliveries.faults(account):
        assert f"{what}. {remedy}" in said
        for row in rows:
            assert row in said
    assert "not asked for: no unit file names these tags SPARE-9.PV 4" in said.replace("Not", "not")


def test_who_superseded_readings_is_told_by_name(monkeypatch, store):
    said = words(intake(monkeypatch, store, named="larkmoor-1"))
    # By hand: the night shift says three good readings otherwise than the first export.
    (export,) = deliveries.named(store.exports(), "night-shift.csv")
    assert f"3 superseded by night-shift.csv (export {export.number})." in said


def test_what_was_set_aside_is_told_in_its_two_lines_and_a_name_is_no_markup(monkeypatch, store):
    test = intake(monkeypatch, store, exports=deliveries.ASIDE)
    (export,) = (one for one in store.exports() if one.status == "set aside")
    for line in export.error.splitlines():
        assert line.strip() in words(test)
    assert "handover &lt;b&gt;notes.csv" in text(test)
    assert "<b>" not in text(test)


def test_how_an_export_was_read_is_told(monkeypatch, store):
    said = words(intake(monkeypatch, store, named="night-shift"))
    (export,) = deliveries.named(store.exports(), "night-shift.csv")
    assert export.account["dialect"]
    for line in export.account["dialect"]:
        assert line in said


def test_the_head_counts_all_exports_by_status(monkeypatch, store):
    said = words(intake(monkeypatch, store))
    frame = deliveries.table(store.exports())
    assert f"{len(frame)} exports: \u25cf" in said
    for status, count in frame["status"].value_counts().items():
        assert f"{deliveries.SHAPES[status]} {count} {status}" in said


def test_thousands_of_exports_come_in_sheets_and_a_filter_leads_back_to_the_first(monkeypatch, store):
    test = intake(monkeypatch, store)
    sheets = -(-len(store.exports()) // PAGE_OF)
    assert f"Sheet, 1 to {sheets}" in test.number_input[0].label
    test.number_input[0].set_value(sheets).run()
    assert text(test).count("<summary>") == len(store.exports()) - (sheets - 1) * PAGE_OF
    test.text_input[0].set_value("larkmoor-1").run()
    assert text(test).count("<summary>") == 1
    assert not test.number_input


def test_a_filter_that_fits_nothing_says_so(monkeypatch, store):
    assert "No export of that kind." in words(intake(monkeypatch, store, named="nowhere"))


def test_the_longest_gap_is_told_in_words(monkeypatch, store):
    # By hand: deliveries every 4 h, the 21st to the 31st left out: 12 steps of 4 h.
    assert "Longest time without a delivery: 2 d" in words(intake(monkeypatch, store))


def test_the_chart_counts_what_the_ledger_counts_and_has_a_sentence(monkeypatch, store):
    test = intake(monkeypatch, store, deliveries="10 weeks by day")
    assert len(charts(test)) == 1
    alt = test.get("vega_lite_chart")[0].proto.alt.replace("\u202f", " ")
    frame = deliveries.table(store.exports())
    assert f"{number(int(frame['readings'].sum()))} in {len(frame)} exports" in alt


def test_an_empty_store_says_how_to_fill_it(monkeypatch, tmp_path):
    said = text(shown(monkeypatch, tmp_path / "nothing", INTAKE))
    assert "outlet follow" in said
    assert "outlet run" in said


def test_a_store_in_which_nothing_could_be_read_still_tells_why(monkeypatch, tmp_path):
    from ingest.unitfile import load
    from monitor.run import run_pass

    (tmp_path / "broken.csv").write_text("no time here\n1\n", encoding="utf-8")
    run_pass(
        [load(UNIT_FILE)], tmp_path / "store", [tmp_path / "broken.csv"],
        progress=lambda *_: None, settle=timedelta(0),
    )  # fmt: skip
    said = words(shown(monkeypatch, tmp_path / "store", INTAKE))
    assert "broken.csv:1: the header" in said
    assert "What could not be read is told under Intake" in words(shown(monkeypatch, tmp_path / "store"))


def test_a_new_pass_shows_at_the_next_refresh(monkeypatch, store):
    test = intake(monkeypatch, store)
    known = len(store.exports())
    assert f"{known} exports:" in words(test)
    intake_made.delivered(store, [datetime.now(UTC) - timedelta(days=3)])
    test.run()
    assert f"{known + 1} exports:" in words(test)


@pytest.fixture(scope="module")
def opened(chromium: str, store: Store) -> Iterator[object]:
    """Open the view in a real browser on a screen and on a phone, light and dark."""
    with serving(store.folder) as port, sync_playwright() as play:
        browser = play.chromium.launch(executable_path=chromium, args=QUIET)

        def make(*, wide: bool, scheme: str) -> Page:
            size = {"width": 1920, "height": 1080} if wide else {"width": 390, "height": 844}
            context = browser.new_context(viewport=size, color_scheme=scheme, is_mobile=not wide)
            page = context.new_page()
            page.said = []
            page.on("console", lambda m: page.said.append(m.text) if m.type == "error" else None)
            page.goto(f"http://127.0.0.1:{port}/intake")
            page.wait_for_selector(".foot", timeout=30_000)
            page.wait_for_selector("canvas", timeout=30_000)
            return page

        yield make
        browser.close()


@pytest.mark.browser
@pytest.mark.parametrize(("wide", "scheme"), [(True, "light"), (False, "dark")], ids=["1920", "390"])
def test_an_export_opens_to_what_the_ledger_holds_of_it(opened, store: Store, wide: bool, scheme: str):
    page = opened(wide=wide, scheme=scheme)
    line = page.locator("details", has=page.locator("summary", has_text="night-shift.csv"))
    assert not line.locator("table").first.is_visible()
    line.locator("summary").focus()
    page.keyboard.press("Enter")
    line.locator("table").first.wait_for(state="visible")
    (export,) = deliveries.named(store.exports(), "night-shift.csv")
    account = deliveries.account_of(export)
    cells = [cell.inner_text() for cell in line.locator("table").first.locator("td").all()]
    counts = [int(cell.replace("\u202f", "")) for cell in cells]
    assert counts == [*(count for count, _ in deliveries.sum_of(account)), account.readings]
    assert sum(counts[:-1]) == counts[-1]
    for evidence in account.evidence:
        assert line.get_by_text(evidence.describe(export.name)).first.is_visible()
    over = page.evaluate(
        "(e => e.scrollWidth - e.clientWidth)(document.querySelector('[data-testid=stMain]'))"
    )
    assert over <= 0
    assert [one for one in page.said if not one.startswith(KNOWN[0]) and KNOWN[1] not in one] == []
