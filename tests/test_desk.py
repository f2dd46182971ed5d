"""The alert desk: alerts of real passes, what late data do to them, and what people write about them."""

from __future__ import annotations

import json
import os
import subprocess
import sys
from collections.abc import Sequence
from concurrent.futures import ProcessPoolExecutor
from dataclasses import replace
from datetime import UTC, datetime, timedelta
from functools import partial
from pathlib import Path

import numpy as np
import pytest

from demo_data.exports import UNIT_FILE
from ingest import journal
from ingest.errors import StoreError
from ingest.ledger import Store
from ingest.unit import Unit, Watch
from monitor import desk
from monitor.alerts import Alert
from monitor.register import GONE_DATA
from monitor.run import run_pass
from tests.passes_made import told_nobody
from tests.source import ROOT
from tests.units_made import MIDNIGHT, MINUTE, made_unit

HOUR = timedelta(hours=1)
START = datetime.fromtimestamp(MIDNIGHT / 1e6, UTC)
WATCH = Watch(
    name="yield, shift", figure="yield on feed", window=timedelta(hours=8), low=48.0, high=None,
    priority="high", deadband=0.2, on_delay=HOUR, off_delay=HOUR, steady=True,
)  # fmt: skip
UNIT = made_unit(watches=(WATCH,))
LOW = (48, 60)  # hours in which the yield is low: 44 of 98 mol% instead of 49


def export(folder: Path, name: str, hours: tuple[int, int], low: tuple[int, int] | None) -> Path:
    """A wide export by the minute, one analysis each six minutes; the yield is 50 %, or 45 % while low."""
    minutes = np.arange(hours[0] * 60, hours[1] * 60)
    noise = np.random.default_rng(7).normal(0, 0.01, 200 * 60)[minutes]
    inside = (minutes >= low[0] * 60) & (minutes < low[1] * 60) if low else np.zeros(len(minutes), bool)
    wanted = np.where(inside, 44.0, 49.0) + noise
    lines = ["time,FI-1.PV,AI-2 n-butane.PV,AI-2 isobutane.PV"]
    for minute, made, extra in zip(minutes.tolist(), wanted.tolist(), noise.tolist(), strict=True):
        at = datetime.fromtimestamp((MIDNIGHT + minute * MINUTE) / 1e6, UTC).strftime("%Y-%m-%dT%H:%M:%SZ")
        analysis = f"{98 - made:.4f},{made:.4f}" if minute % 6 == 0 else ","
        lines.append(f"{at},{100 + extra:.3f},{analysis}")
    path = folder / name
    path.write_text("\n".join(lines) + "\n", encoding="utf-8")
    return path


def passed(store: Path, exports: Sequence[Path], unit: Unit = UNIT) -> tuple[Alert, ...]:
    run_pass([unit], store, exports, progress=told_nobody, settle=timedelta(0))
    return desk.known(store, "made")


def test_late_and_corrected_data_end_move_withdraw_and_bring_back_one_and_the_same_alert(tmp_path: Path):
    store = tmp_path / "store"
    assert passed(store, [export(tmp_path, "1.csv", (0, 50), LOW)]) == ()
    (raised,) = passed(store, [export(tmp_path, "2.csv", (50, 58), LOW)])
    assert (raised.id, raised.active, raised.past) == ("made-1", True, False)
    (ended,) = passed(store, [export(tmp_path, "3.csv", (58, 80), LOW)])
    assert (ended.id, ended.active) == ("made-1", False)
    assert ended.raised == raised.raised
    (moved,) = passed(store, [export(tmp_path, "4.csv", (46, 60), (46, 60))])
    assert moved.id == "made-1"
    assert moved.raised < raised.raised
    (gone,) = passed(store, [export(tmp_path, "5.csv", (40, 62), None)])
    assert (gone.id, gone.withdrawn) == ("made-1", GONE_DATA)
    (back,) = passed(store, [export(tmp_path, "6.csv", (40, 62), (50, 60))])
    assert (back.id, back.withdrawn) == ("made-1", "")
    assert len(desk.history(store, back)) == 5


def test_the_same_pass_twice_revises_nothing(tmp_path: Path):
    store, file = tmp_path / "store", export(tmp_path, "1.csv", (0, 58), LOW)
    (first,) = passed(store, [file])
    (second,) = passed(store, [file])
    assert second == first
    assert len(desk.history(store, first)) == 1


def test_what_came_with_old_data_asks_for_nobody(tmp_path: Path):
    (alert,) = passed(tmp_path / "store", [export(tmp_path, "1.csv", (0, 96), LOW)])
    assert alert.past
    (_, state), *_ = desk.read(tmp_path / "store", "made", START + 100 * HOUR)
    assert state.condition == "normal"


ALERT = Alert(
    id="demo-1", unit="demo", watch="yield on feed 8 h", figure="yield on feed", window_h=8.0, side="low",
    limit=81.0, priority="high", first_crossed=START, raised=START + HOUR, cleared=None, suppressed=False,
    past=False,
)  # fmt: skip
NOW = START + 10 * HOUR


@pytest.fixture
def store(tmp_path: Path) -> Path:
    """A store with an open alert, one that is over, and one long over."""
    over = replace(ALERT, id="demo-2", cleared=START + 3 * HOUR)
    past = replace(over, id="demo-3", past=True)
    with Store(tmp_path).begin() as pass_:
        pass_.at_commit(partial(desk.put, alerts=[ALERT, over, past]))
    return tmp_path


def condition(store: Path, number: int = 1, now: datetime = NOW) -> str:
    return desk.find(store, f"demo-{number}", now)[1].condition


def test_taking_shelving_and_closing_an_alert_moves_it_and_names_who(store: Path):
    desk.take(store, "demo-1", "A. Moor", note="on it", now=NOW)
    assert condition(store) == "acknowledged"
    desk.shelve(store, "demo-1", "B. Lark", reason="analyzer under repair", length=4 * HOUR, now=NOW)
    assert condition(store) == "shelved"
    assert condition(store, now=NOW + 4 * HOUR) == "acknowledged"
    desk.unshelve(store, "demo-1", "B. Lark", now=NOW)
    desk.add_note(store, "demo-1", "C. Tarn", "sample line was blocked", now=NOW)
    desk.close(store, "demo-1", "C. Tarn", cause="instrument", now=NOW)
    _, state = desk.find(store, "demo-1", NOW)
    assert state.closed_as == "instrument"
    assert [(line.act, line.who) for line in state.lines] == [
        ("acknowledge", "A. Moor"),
        ("shelve", "B. Lark"),
        ("unshelve", "B. Lark"),
        ("note", "C. Tarn"),
        ("close", "C. Tarn"),
    ]


def test_a_watch_out_of_service_asks_for_nobody_until_it_is_back(store: Path):
    desk.rest(store, "demo", ALERT.watch, "A. Moor", reason="new limits on trial", now=NOW)
    assert condition(store) == "out of service"
    desk.resume(store, "demo", ALERT.watch, "A. Moor", now=NOW)
    assert condition(store) == "unacknowledged"


def test_what_makes_no_sense_is_refused_and_writes_nothing(store: Path):
    with pytest.raises(StoreError, match="demo-9: there is none"):
        desk.take(store, "demo-9", "A. Moor", now=NOW)
    with pytest.raises(StoreError, match="demo-3: is back to normal"):
        desk.take(store, "demo-3", "A. Moor", now=NOW)
    with pytest.raises(StoreError, match="cannot be shelved for 9:00:00"):
        desk.shelve(store, "demo-1", "A. Moor", reason="rest", length=9 * HOUR, now=NOW)
    with pytest.raises(StoreError, match="without a reason"):
        desk.shelve(store, "demo-1", "A. Moor", reason=" ", now=NOW)
    with pytest.raises(StoreError, match="unacknowledged, not shelved"):
        desk.unshelve(store, "demo-1", "A. Moor", now=NOW)
    with pytest.raises(StoreError, match="no empty note"):
        desk.add_note(store, "demo-1", "A. Moor", "  ", now=NOW)
    with pytest.raises(StoreError, match="cannot be closed as 'weather'"):
        desk.close(store, "demo-1", "A. Moor", cause="weather", now=NOW)
    with pytest.raises(StoreError, match="nobody is named"):
        desk.take(store, "demo-1", " ", now=NOW)
    assert journal.lines(store) == ()


def _take_many(store: Path, who: str) -> None:
    for _ in range(25):
        desk.take(store, "demo-1", who)


def test_acknowledgements_from_eight_processes_are_all_in_the_journal_in_order(store: Path):
    people = [f"person {number}" for number in range(8)]
    with ProcessPoolExecutor(8) as pool:
        list(pool.map(partial(_take_many, store), people))
    lines = journal.lines(store)
    assert [line.number for line in lines] == list(range(1, 201))
    assert {who: sum(line.who == who for line in lines) for who in people} == dict.fromkeys(people, 25)
    assert [line.written for line in lines] == sorted(line.written for line in lines)


def outlet(*words: str) -> subprocess.CompletedProcess[str]:
    environment = {**os.environ, "PYTHONPATH": str(ROOT), "PYTHONDONTWRITEBYTECODE": "1"}
    whole = [sys.executable, "-m", "monitor", "alerts", *words]
    return subprocess.run(whole, capture_output=True, text=True, check=False, env=environment)


def test_the_command_lists_takes_and_shows_and_refuses_in_two_lines(store: Path):
    place = ("--store", str(store))
    unit = ("--unit", str(UNIT_FILE))
    listed = outlet("list", *unit, *place).stdout.splitlines()
    assert [line.split()[0] for line in listed[1:3]] == ["demo-1", "demo-2"]
    taken = outlet("take", "demo-1", *place, "--who", "A. Moor", "--note", "on it")
    assert (taken.returncode, taken.stdout) == (0, "demo-1: taken by A. Moor\n")
    shown = json.loads(outlet("show", "demo-1", *unit, *place, "--json").stdout)
    assert (shown["condition"], shown["by"], shown["journal"][0]["note"]) == (
        "acknowledged",
        "A. Moor",
        "on it",
    )
    assert "acknowledged by A. Moor" in outlet("show", "demo-1", *unit, *place).stdout
    refused = outlet("take", "demo-3", *place)
    assert refused.returncode == 2
    assert refused.stderr.splitlines()[0] == "alert demo-3: is back to normal, there is nothing to take"
