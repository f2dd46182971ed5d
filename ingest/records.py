"""What the ledger holds about exports, passes, parts and episodes: rows out of SQLite and into it."""

from __future__ import annotations

import json
import sqlite3
from collections.abc import Iterable, Mapping
from dataclasses import astuple, dataclass, fields
from pathlib import Path
from typing import Any

from ingest import episodes
from ingest.parts import Part
from ingest.snapshot import Key, Snapshot


@dataclass(frozen=True, slots=True)
class Export:
    """One export in the ledger, and what became of its rows.

    `status` is 'taken' or 'set aside' (then `error` says why, in two lines); `asked` is what was asked of it;
    `account` tells every row by what became of it, with evidence. `made_by` is the number of the pass.
    """

    number: int
    sha256: str
    name: str
    size: int
    taken_at: str  # ISO 8601, UTC
    status: str
    error: str
    asked: Mapping[str, Any]
    account: Mapping[str, Any]
    made_by: int


@dataclass(frozen=True, slots=True)
class PassEntry:
    """One committed pass: times in ISO 8601, UTC; `rows` counts the rows of the parts it wrote."""

    number: int
    started: str
    finished: str
    exports: int
    rows: int
    note: str


@dataclass(frozen=True, slots=True)
class Seen:
    """A file as it was when last hashed: an unchanged one need not be read to know its content."""

    size: int
    mtime_ns: int
    sha256: str


def read_snapshot(folder: Path, ledger: sqlite3.Connection) -> Snapshot:
    """Give what the ledger names now.

    Parameters
    ----------
    folder : Path
        The store.
    ledger : sqlite3.Connection
        In one transaction, or while no pass can commit.

    Returns
    -------
    Snapshot
    """
    found = (Part(*row) for row in ledger.execute("SELECT * FROM parts ORDER BY unit, stage, month"))
    known = {(part.unit, part.stage, part.month): part for part in found}
    generation = ledger.execute("SELECT coalesce(max(number), 0) FROM passes").fetchone()[0]
    details: dict[str, list[str]] = {}
    for unit, detail in ledger.execute("SELECT unit, detail FROM episodes ORDER BY unit, position"):
        details.setdefault(unit, []).append(detail)
    columns = dict(ledger.execute("SELECT unit, columns FROM episode_columns"))
    rows = {unit: episodes.Rows(_pairs(text), tuple(details.get(unit, []))) for unit, text in columns.items()}
    return Snapshot(folder, generation, known, rows)


def read_exports(ledger: sqlite3.Connection) -> list[Export]:
    """List all exports of the ledger.

    Parameters
    ----------
    ledger : sqlite3.Connection

    Returns
    -------
    list of Export
        By number.
    """
    names = [field.name for field in fields(Export)]
    rows = ledger.execute("SELECT * FROM exports ORDER BY number")
    entries: list[dict[str, Any]] = [dict(zip(names, row, strict=True)) for row in rows]
    told = [{name: json.loads(entry[name]) for name in ("asked", "account")} for entry in entries]
    return [Export(**{**entry, **texts}) for entry, texts in zip(entries, told, strict=True)]


def write_parts(ledger: sqlite3.Connection, before: Mapping[Key, Part], now: Mapping[Key, Part]) -> None:
    """Bring the ledger's list of parts from what it was to what it is.

    Parameters
    ----------
    ledger : sqlite3.Connection
        In a transaction.
    before, now : mapping of key to Part
    """
    changed = [key for key in {**before, **now} if before.get(key) != now.get(key)]
    ledger.executemany("DELETE FROM parts WHERE (unit, stage, month) = (?, ?, ?)", changed)
    new = [astuple(now[key]) for key in changed if key in now]
    ledger.executemany("INSERT INTO parts VALUES (?, ?, ?, ?, ?, ?, ?, ?)", new)


def write_exports(ledger: sqlite3.Connection, recorded: Iterable[Export]) -> None:
    """Enter exports in the place of entries of the same content.

    Parameters
    ----------
    ledger : sqlite3.Connection
        In a transaction.
    recorded : iterable of Export
    """
    for e in sorted(recorded, key=lambda export: export.number):
        ledger.execute("DELETE FROM exports WHERE sha256 = ?", (e.sha256,))
        start = (e.number, e.sha256, e.name, e.size, e.taken_at, e.status, e.error)
        told = (json.dumps(e.asked, sort_keys=True), json.dumps(e.account, sort_keys=True))
        ledger.execute(
            "INSERT INTO exports VALUES (?, ?, ?, ?, ?, ?, ?, ?, ?, ?)", (*start, *told, e.made_by)
        )


def write_episodes(ledger: sqlite3.Connection, unit: str, rows: episodes.Rows) -> None:
    """Put rows in the place of a unit's episodes.

    Parameters
    ----------
    ledger : sqlite3.Connection
        In a transaction.
    unit : str
    rows : Rows
        From `episodes.to_rows`.
    """
    ledger.execute("DELETE FROM episodes WHERE unit = ?", (unit,))
    ledger.execute("INSERT OR REPLACE INTO episode_columns VALUES (?, ?)", (unit, json.dumps(rows.columns)))
    lines = [(position, detail, json.loads(detail)) for position, detail in enumerate(rows.details)]
    ledger.executemany(
        "INSERT INTO episodes VALUES (?, ?, ?, ?, ?, ?)",
        [(unit, n, d.get("watch"), d.get("raised"), d.get("cleared"), detail) for n, detail, d in lines],
    )


def _pairs(text: str) -> tuple[tuple[str, str], ...]:
    """Names and types of columns, as they went into JSON."""
    return tuple((name, kind) for name, kind in json.loads(text))
