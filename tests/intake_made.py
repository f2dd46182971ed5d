"""A store whose ledger has seen all kinds of exports: good ones, refused rows, a file that is no export."""

from __future__ import annotations

from dataclasses import replace
from datetime import datetime, timedelta
from pathlib import Path

from demo_data import exports
from ingest.ledger import Store
from ingest.records import Export
from ingest.unitfile import load
from monitor.run import run_pass

BAD_ROWS = (
    ("2026-03-01T05:00:00+01:00", "5700 kg", "25600"),
    ("2026-03-01T05:01:00+01:00", "5701.5", "25601"),
    ("five past five", "5702.5", "25602"),
    ("2026-03-01T05:03:00+01:00", "", "inf"),
)


def taken_in(folder: Path, *, days: int) -> Store:
    """A real pass over the demo plant's exports, one with bad rows and a spare tag, and one that is none."""
    made = list(exports.make(folder / "plant", days=days).exports)
    refused, broken = folder / "plant" / "night-shift.csv", folder / "plant" / "handover <b>notes.csv"
    rows = [",".join((*row, "7")) for row in BAD_ROWS]
    refused.write_text("\n".join(["time,FI-201.PV,FI-202.PV,SPARE-9.PV", *rows]) + "\n", encoding="utf-8")
    broken.write_text("no time here\n1\n", encoding="utf-8")
    files = [*made, refused, broken]
    run_pass(
        [load(exports.UNIT_FILE)], folder / "store", files, progress=lambda *_: None, settle=timedelta(0)
    )
    return Store(folder / "store")


def delivered(store: Store, times: list[datetime]) -> None:
    """Enter an export for each time, as a delivery of long ago would stand in the ledger."""
    with store.begin() as pass_:
        first, *_ = (one for one in pass_.exports() if one.status == "taken")
        number = 1 + max(one.number for one in pass_.exports())
        for place, time in enumerate(times):
            pass_.record_export(_again(first, number + place, time, pass_.number))


def _again(export: Export, number: int, time: datetime, made_by: int) -> Export:
    name = f"larkmoor-hourly-{time:%Y%m%dT%H}.csv"
    readings = 1000 + 37 * (number % 11)
    account = {
        **export.account,
        "export": name,
        "readings": readings,
        "accepted": readings,
        "superseded": 0,
        "superseded_by": [],
        "rows": readings // 18,
    }
    taken_at = time.isoformat(timespec="seconds")
    return replace(
        export, number=number, sha256=f"{number:064}", name=name, taken_at=taken_at, account=account,
        made_by=made_by, size=60 * readings,
    )  # fmt: skip
