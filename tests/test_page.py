from __future__ import annotations

import asyncio
import json
import sys
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest
import streamlit as st
from streamlit import config
from streamlit.testing.v1 import AppTest

from monitor import wording
from monitor.page import launch
from tests import page_made

END = "2026-04-14T12:20Z"
APP = Path(__file__).parents[1] / "monitor" / "page" / "app.py"
TREND = "from monitor.page import trend\ntrend.view()\n"
BALANCE = "from monitor.page import balance\nbalance.view()\n"


@pytest.fixture(scope="module")
def stores(tmp_path_factory: pytest.TempPathFactory) -> dict[str, Path]:
    """A unit whose yield has fallen, a calm one, one that never ran, and no store at all."""
    folder = tmp_path_factory.mktemp("page")
    of = page_made.unit()
    page_made.fill(folder / "fallen", of, days=10, end=END, off=[(150, 118)], drop=2.4)
    page_made.fill(folder / "calm", of, days=10, end=END, off=[], drop=0)
    page_made.fill(folder / "never", of, days=3, end=END, off=[(500, -1)], drop=0)
    return {name: folder / name for name in ("fallen", "calm", "never", "nothing")}


@pytest.fixture(autouse=True)
def _no_cache_from_another_test() -> Iterator[None]:
    yield
    st.cache_data.clear()
    st.cache_resource.clear()


def shown(monkeypatch: pytest.MonkeyPatch, store: Path, script: str | Path = APP, **query: str) -> AppTest:
    """One view on one store, run to its end without a fault."""
    monkeypatch.setattr(sys, "argv", ["app.py", str(store), str(page_made.DEMO)])
    make = AppTest.from_file if isinstance(script, Path) else AppTest.from_string
    test = make(str(script), default_timeout=30)
    for key, value in query.items():
        test.query_params[key] = value
    test.run()
    assert not test.exception
    return test


def text(test: AppTest) -> str:
    """All words that the view writes, without its style."""
    blocks = [element.proto.body for element in test.get("html")]
    return " ".join(b for b in blocks if "<style>" not in b).replace("\u00a0", " ")


def charts(test: AppTest) -> list[dict[str, Any]]:
    return [json.loads(element.proto.spec) for element in test.get("vega_lite_chart")]


def test_now_shows_six_figures_with_half_width_unit_and_the_open_episode_in_words(monkeypatch, stores):
    said = text(shown(monkeypatch, stores["fallen"]))
    assert said.count("class='big'") == 6
    assert "1 open alert, worst first" in said
    assert "An instrument moved, not the reactor: AI-220 methacrolein" in said
    assert "Yield of methacrolein on isobutene fed has been below 81.0 % since 14 Apr 09:10 CEST" in said
    assert "± 0.28 %" in said
    assert "below 81.0 %" in said


def test_now_says_how_old_the_data_are_and_that_the_unit_runs(monkeypatch, stores):
    said = text(shown(monkeypatch, stores["fallen"]))
    assert "\u25cf running</strong> since 9 Apr" in said
    assert "no new data" in said  # the made store ends in April 2026, hours before any clock that runs this
    assert "14 Apr" in said


def test_now_says_when_no_limit_is_crossed(monkeypatch, stores):
    said = text(shown(monkeypatch, stores["calm"]))
    assert "No limit of 4 watches is crossed; the last one ended 13 Apr" in said


def test_every_key_figure_opens_to_definition_windows_coverage_and_watch(monkeypatch, stores):
    said = text(shown(monkeypatch, stores["fallen"]))
    for part in (
        "definition",
        "numerator",
        "denominator",
        "half-width",
        "coverage",
        "97 %",
        "Watched: 8 h, steady",
    ):
        assert part in said
    assert said.count("<th scope='row'>7 d</th>") == 6


def test_no_number_is_ever_shown_as_nan_or_none(monkeypatch, stores):
    for name in ("fallen", "calm", "never"):
        for script in (APP, TREND, BALANCE):
            said = text(shown(monkeypatch, stores[name], script)).lower()
            assert not {"nan", "none", "nat", "inf"} & set(said.replace("<", " ").replace(">", " ").split())


def test_a_unit_that_never_ran_is_told_in_words(monkeypatch, stores):
    assert "The unit never ran" in text(shown(monkeypatch, stores["never"]))
    assert "The unit was not running in this window." in text(shown(monkeypatch, stores["never"], TREND))
    assert "No reading took part in a balance" in text(shown(monkeypatch, stores["never"], BALANCE))


@pytest.mark.parametrize("script", [APP, TREND, BALANCE], ids=["now", "trend", "balance"])
def test_an_empty_store_says_how_to_fill_it(monkeypatch, stores, script):
    assert "outlet run" in text(shown(monkeypatch, stores["nothing"], script))


def test_a_store_that_is_filled_while_the_page_is_open_shows_at_the_next_refresh(monkeypatch, tmp_path):
    test = shown(monkeypatch, tmp_path / "later")
    assert "Nothing has been taken in yet" in text(test)
    of = page_made.unit()
    page_made.fill(tmp_path / "later", of, days=2, end=END, off=[], drop=0)
    test.run()
    assert "last cell ended 14 Apr" in text(test)
    page_made.fill(tmp_path / "later", of, days=2, end="2026-04-15T12:20Z", off=[], drop=0)
    test.run()
    assert "last cell ended 15 Apr" in text(test)


def test_a_broken_unit_file_is_told_with_its_remedy(monkeypatch, stores, tmp_path):
    broken = tmp_path / "broken.toml"
    broken.write_text("[unit]\nname = 3\n", encoding="utf-8")
    monkeypatch.setattr(page_made, "DEMO", broken)
    said = text(shown(monkeypatch, stores["calm"]))
    assert "The unit file cannot be read." in said
    assert "broken.toml" in said


@pytest.mark.parametrize("script", [APP], ids=["now"])
def test_the_cautions_stand_at_the_foot(monkeypatch, stores, script):
    said = text(shown(monkeypatch, stores["calm"], script))
    for one in wording.CAUTIONS:
        assert one.replace("'", "&#x27;") in said


def test_trend_takes_figures_window_mode_and_span_from_the_address(monkeypatch, stores):
    test = shown(
        monkeypatch,
        stores["fallen"],
        TREND,
        figures="Closure of carbon",
        window="24 h",
        mode="steady",
        span="3 d",
    )
    (chart,) = charts(test)
    x = chart["layer"][2]["encoding"]["x"]
    assert x["scale"]["domain"] == ["2026-04-11T12:20:00Z", "2026-04-14T12:20:00Z"]
    assert "24 h, steady" in text(test)


def test_trend_draws_limits_episodes_and_a_brush(monkeypatch, stores):
    test = shown(monkeypatch, stores["fallen"], TREND)
    first = json.dumps(charts(test)[0])
    assert "low 81.0" in first
    assert '"brush"' in first
    assert len(charts(test)) == 2


def test_what_the_brush_draws_can_be_typed(monkeypatch, stores):
    query = {"span": "from\u2013to", "from": "2026-04-13T08:00", "to": "2026-04-13T20:00"}
    test = shown(monkeypatch, stores["fallen"], TREND, **query)
    domain = charts(test)[0]["layer"][2]["encoding"]["x"]["scale"]["domain"]
    # By hand: Berlin is two hours ahead of UTC in April.
    assert domain == ["2026-04-13T06:00:00Z", "2026-04-13T18:00:00Z"]
    assert {element.proto.label for element in test.get("date_time_input")} == {
        "From (plant time)",
        "To (plant time)",
    }


def test_a_span_that_ends_before_it_begins_is_told(monkeypatch, stores):
    query = {"span": "from\u2013to", "from": "2026-04-13T20:00", "to": "2026-04-13T08:00"}
    assert "The span ends before it begins." in text(shown(monkeypatch, stores["fallen"], TREND, **query))


def test_balance_shows_closures_the_fit_and_what_every_instrument_was_adjusted_by(monkeypatch, stores):
    test = shown(monkeypatch, stores["fallen"], BALANCE)
    said = text(test)
    assert "Closure of carbon" in said
    assert "oxygen in air" in said
    assert said.count("stands out") >= 1
    assert "not redundant: nothing checks it" in said
    assert "no reading took part" in said
    assert len(charts(test)) >= 4


def test_every_chart_has_a_sentence_for_those_who_cannot_see_it(monkeypatch, stores):
    for script in (APP, TREND, BALANCE):
        found = shown(monkeypatch, stores["fallen"], script).get("vega_lite_chart")
        assert found
        assert all(len(element.proto.alt) > 30 for element in found)


def test_the_command_line_serves_this_machine_only_and_reports_to_nobody():
    words = launch.command(Path("store"), [Path("one.toml"), Path("two.toml")], 8700)
    for flag in (
        "--server.address=127.0.0.1",
        "--server.port=8700",
        "--server.allowedHosts=localhost",
        "--server.allowedHosts=127.0.0.1",
        "--browser.gatherUsageStats=false",
        "--client.showErrorDetails=none",
        "--server.enableXsrfProtection=true",
        "--server.enableCORS=true",
    ):
        assert flag in words
    assert words[0] == sys.executable
    behind = words[words.index("--") + 1 :]
    assert [Path(word).name for word in behind] == ["store", "one.toml", "two.toml"]


def test_every_flag_is_an_option_that_streamlit_knows():
    flags = [
        word[2:].split("=")[0]
        for word in launch.command(Path("s"), [Path("u")])
        if word.startswith("--") and word != "--"
    ]
    assert set(flags) <= set(config._config_options_template)


def test_the_entry_is_short():
    assert len(APP.read_text(encoding="utf-8").splitlines()) < 60


async def answer(host: str) -> list[dict[str, Any]]:
    """What the guard sends for one request under a host name."""
    from monitor.page.server import Guard

    sent: list[dict[str, Any]] = []

    async def inner(scope: Any, receive: Any, send: Any) -> None:
        await send(
            {"type": "http.response.start", "status": 200, "headers": [(b"X-Frame-Options", b"ALLOW")]}
        )
        await send({"type": "http.response.body", "body": b"ok"})

    async def send(message: dict[str, Any]) -> None:
        sent.append(message)

    async def receive() -> dict[str, Any]:
        return {"type": "http.request"}

    await Guard(inner)({"type": "http", "headers": [(b"host", host.encode())]}, receive, send)
    return sent


def test_the_guard_refuses_a_foreign_host_name_and_adds_its_headers_once():
    refused, served = (asyncio.run(answer(host)) for host in ("rebound.example:8640", "localhost:8640"))
    assert refused[0]["status"] == 403
    assert served[0]["status"] == 200
    frames = [value for name, value in served[0]["headers"] if name.lower() == b"x-frame-options"]
    assert frames == [b"DENY"]


def test_a_fault_that_the_user_can_mend_is_told_in_its_own_words(monkeypatch, stores):
    script = (
        "from monitor.page.server import told\nfrom ingest.errors import StoreError\n"
        "told(StoreError('store: is damaged', remedy='Put it back from a copy.'))\n"
        "told(ValueError('secret path'))\n"
    )
    said = text(shown(monkeypatch, stores["calm"], script))
    assert "store: is damaged" in said
    assert "Put it back from a copy." in said
    assert "secret path" not in said
