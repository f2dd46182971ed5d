"""The journal: what people did, one line each, in the order of writing; no line changes or goes."""

from __future__ import annotations

import json
import sqlite3
from collections.abc import Mapping
from dataclasses import dataclass
from datetime import datetime
from pathlib import Path
from typing import Any

from ingest import database
from ingest.errors import StoreError

NOTHING: Mapping[str, Any] = {}


@dataclass(frozen=True, slots=True)
class Line:
    """One line: who did what, to what, with which words.

    `number` is the order of writing, also where a clock went backwards. `act` is one of few words
    ("acknowledge", "shelve", "note"), `subject` the stable key of what it is about, and `detail` holds what
    the act needs besides (reason, until, cause).
    """

    number: int
    written: str  # ISO 8601, UTC
    who: str
    act: str
    unit: str | None
    subject: str
    note: str
    detail: Mapping[str, Any]


def write(
    folder: Path,
    *,
    who: str,
    act: str,
    unit: str | None,
    subject: str,
    note: str = "",
    detail: Mapping[str, Any] = NOTHING,
    at: datetime | None = None,
) -> Line:
    """Write one line into a store's journal; it is on the disk when this returns, also while a pass runs.

    Parameters
    ----------
    folder : Path
        The store.
    who : str
        Not empty.
    act : str
    unit : str or None
        None for a line about the whole site.
    subject, note : str
    detail : mapping of str
        What JSON knows.
    at : datetime or None
        With a zone; None for the present.

    Returns
    -------
    Line
        With its number.
    """
    with database.writing(folder) as ledger:
        return put(ledger, who=who, act=act, unit=unit, subject=subject, note=note, detail=detail, at=at)


def put(
    ledger: sqlite3.Connection,
    *,
    who: str,
    act: str,
    unit: str | None,
    subject: str,
    note: str = "",
    detail: Mapping[str, Any] = NOTHING,
    at: datetime | None = None,
) -> Line:
    """Write one line as a step of an open transaction, such as `Pass.at_commit` gives.

    Parameters
    ----------
    ledger : sqlite3.Connection
        In a transaction that may write.
    who, act : str
    unit : str or None
    subject, note : str
    detail : mapping of str
    at : datetime or None
        As in `write`.

    Returns
    -------
    Line
        With the number that it has once the transaction is committed.
    """
    if not who.strip():
        raise StoreError("journal: nobody is named", remedy="Say who writes the line.")
    told = json.dumps(dict(detail), ensure_ascii=False, allow_nan=False, sort_keys=True)
    # The clock is read inside the transaction: who writes later reads it later, whichever process it is.
    values = (database.stamp(at), who.strip(), act, unit, subject, note, told)
    number = ledger.execute(
        "INSERT INTO journal (written, who, act, unit, subject, note, detail)"
        " VALUES (?, ?, ?, ?, ?, ?, ?) RETURNING number",
        values,
    ).fetchone()[0]
    return _line(number, *values)


def lines(folder: Path, *, unit: str | None = None, after: int = 0) -> tuple[Line, ...]:
    """List the lines of a store's journal.

    Parameters
    ----------
    folder : Path
        The store.
    unit : str or None
        None for the lines of all units and of the site.
    after : int
        Only lines with a higher number.

    Returns
    -------
    tuple of Line
        In the order of writing.
    """
    query = (
        "SELECT number, written, who, act, unit, subject, note, detail FROM journal"
        " WHERE number > ? AND (? IS NULL OR unit = ?) ORDER BY number"
    )
    with database.reading(folder) as ledger:
        return tuple(_line(*row) for row in ledger.execute(query, (after, unit, unit)))


def _line(*row: Any) -> Line:
    """A row of the table, its details as a mapping again."""
    values = (*row[:-1], json.loads(row[-1]))
    return Line(*values)
