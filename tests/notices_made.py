"""A small plant whose yield falls for half a day, and targets on this computer that are told of it."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any

import numpy as np

from ingest import database, outbox
from ingest.outbox import Notice
from ingest.unit import Target, Unit, Watch
from monitor.run import run_pass
from tests.passes_made import told_nobody
from tests.units_made import MIDNIGHT, MINUTE, made_unit

HOUR = timedelta(hours=1)
START = datetime.fromtimestamp(MIDNIGHT / 1e6, UTC)
NOW = datetime(2026, 3, 5, 12, tzinfo=UTC)
WATCH = Watch(
    name="yield, shift", figure="yield on feed", window=timedelta(hours=8), low=48.0, high=None,
    priority="high", deadband=0.2, on_delay=HOUR, off_delay=HOUR, steady=True,
)  # fmt: skip
HOOK = Target(
    name="desk", kind="webhook", priorities=("high", "medium", "low"), quiet=None, quiet_exempt=("high",),
    per_hour=12, page="", secret_env="", secret_file=None, ca_file=None, url="http://127.0.0.1:9/alerts",
)  # fmt: skip
LOW = (48, 60)  # hours in which the yield is low


def unit_with(*targets: Target, **changes: Any) -> Unit:
    """The made unit with one watch and some targets."""
    return replace(made_unit(watches=(WATCH,)), targets=targets, **changes)


def export(folder: Path, name: str, hours: tuple[int, int], low: tuple[int, int] | None = LOW) -> Path:
    """A wide export by the minute, an analysis each six: the yield is 50 %, or 45 % while low."""
    minutes = np.arange(hours[0] * 60, hours[1] * 60)
    inside = (minutes >= low[0] * 60) & (minutes < low[1] * 60) if low else np.zeros(len(minutes), bool)
    noise = np.random.default_rng(7).normal(0, 0.01, 200 * 60)[minutes]
    lines = ["time,FI-1.PV,AI-2 n-butane.PV,AI-2 isobutane.PV"]
    for minute, is_low, extra in zip(minutes.tolist(), inside.tolist(), noise.tolist(), strict=True):
        at = datetime.fromtimestamp((MIDNIGHT + minute * MINUTE) / 1e6, UTC).strftime("%Y-%m-%dT%H:%M:%SZ")
        made = (44.0 if is_low else 49.0) + extra
        analysis = f"{98 - made:.4f},{made:.4f}" if minute % 6 == 0 else ","
        lines.append(f"{at},{100 + extra:.3f},{analysis}")
    path = folder / name
    path.write_text("\n".join(lines) + "\n", encoding="utf-8")
    return path


def passed(store: Path, unit: Unit, exports: Sequence[Path]) -> None:
    """Run a pass over exports that are whole."""
    run_pass([unit], store, exports, progress=told_nobody, settle=timedelta(0))


def waiting(store: Path, target: str = "made/desk") -> tuple[Notice, ...]:
    """All that the outbox holds of a target, whatever became of it."""
    with database.reading(store) as ledger:
        return outbox.listed(ledger, target, datetime(2000, 1, 1, tzinfo=UTC))


def empty_store(folder: Path) -> Path:
    """A store with a ledger and nothing in it."""
    folder.mkdir(exist_ok=True)
    database.make_ledger(folder)
    return folder


def put(store: Path, *names: str, made: datetime = NOW, target: str = "made/desk", **body: Any) -> None:
    """Put invented notices into the outbox, one id each."""
    usual = {
        "event": "raised", "unit": "made", "name": "Unit", "priority": "low", "urgent": False,
        "subject": "something", "text": "something has happened\n", "alerts": [],
    }  # fmt: skip
    with database.writing(store) as ledger:
        for name in names:
            outbox.put(
                ledger,
                notice=name,
                kind="raised",
                target=target,
                body={**usual, "subject": f"{name} happened", **body},
                made=made,
                not_before=made,
            )


def everything_written(folder: Path) -> bytes:
    """Every byte of every file below a folder."""
    return b"\n".join(path.read_bytes() for path in sorted(folder.rglob("*")) if path.is_file())
