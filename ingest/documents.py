"""Documents: what was worked out once and is kept as it was, each change a revision of its own."""

from __future__ import annotations

import hashlib
import json
import sqlite3
from collections.abc import Mapping
from dataclasses import dataclass
from datetime import datetime
from pathlib import Path
from typing import Any

from ingest import database


@dataclass(frozen=True, slots=True)
class Document:
    """One revision of a document: revisions count from 1, `sha256` is that of the body as it is kept."""

    unit: str
    kind: str
    key: str
    revision: int
    made: str  # ISO 8601, UTC
    sha256: str
    body: Mapping[str, Any]


def write(
    folder: Path, *, unit: str, kind: str, key: str, body: Mapping[str, Any], at: datetime | None = None
) -> Document:
    """Keep a document as its next revision; one that equals the latest revision adds none.

    Parameters
    ----------
    folder : Path
        The store.
    unit, kind, key : str
        What it is about, such as a month.
    body : mapping of str
        What JSON knows.
    at : datetime or None
        With a zone; None for the present.

    Returns
    -------
    Document
        The latest revision now.
    """
    with database.writing(folder) as ledger:
        return put(ledger, unit=unit, kind=kind, key=key, body=body, at=at)


def put(
    ledger: sqlite3.Connection,
    *,
    unit: str,
    kind: str,
    key: str,
    body: Mapping[str, Any],
    at: datetime | None = None,
) -> Document:
    """Keep a document as a step of an open transaction, such as `Pass.at_commit` gives.

    Parameters
    ----------
    ledger : sqlite3.Connection
        In a transaction that may write.
    unit, kind, key : str
    body : mapping of str
    at : datetime or None
        As in `write`.

    Returns
    -------
    Document
        The latest revision once the transaction is committed.
    """
    text = json.dumps(dict(body), ensure_ascii=False, allow_nan=False, sort_keys=True)
    digest = hashlib.sha256(text.encode()).hexdigest()
    before = _latest(ledger, unit, kind, key)
    if before is not None and before.sha256 == digest:
        return before
    revision = 1 if before is None else before.revision + 1
    row = (unit, kind, key, revision, database.stamp(at), digest, text)
    ledger.execute("INSERT INTO documents VALUES (?, ?, ?, ?, ?, ?, ?)", row)
    return _document(*row)


def latest(folder: Path, unit: str, kind: str, key: str) -> Document | None:
    """Give the latest revision of a document.

    Parameters
    ----------
    folder : Path
        The store.
    unit, kind, key : str

    Returns
    -------
    Document or None
        None if there is none.
    """
    with database.reading(folder) as ledger:
        return _latest(ledger, unit, kind, key)


def revisions(folder: Path, unit: str, kind: str, key: str | None = None) -> tuple[Document, ...]:
    """List all revisions of a document, or of all documents of a kind.

    Parameters
    ----------
    folder : Path
        The store.
    unit, kind : str
    key : str or None
        None for all.

    Returns
    -------
    tuple of Document
        By key, then by revision.
    """
    query = (
        "SELECT * FROM documents WHERE (unit, kind) = (?, ?) AND (? IS NULL OR key = ?)"
        " ORDER BY key, revision"
    )
    with database.reading(folder) as ledger:
        return tuple(_document(*row) for row in ledger.execute(query, (unit, kind, key, key)))


def damaged(ledger: sqlite3.Connection) -> list[str]:
    """Name the documents whose body is not what was written.

    Parameters
    ----------
    ledger : sqlite3.Connection

    Returns
    -------
    list of str
        Unit, kind, key and revision of each.
    """
    rows = ledger.execute("SELECT * FROM documents ORDER BY unit, kind, key, revision")
    return [
        f"{unit} {kind} {key} revision {revision}"
        for unit, kind, key, revision, _, digest, text in rows
        if hashlib.sha256(text.encode()).hexdigest() != digest
    ]


def _latest(ledger: sqlite3.Connection, unit: str, kind: str, key: str) -> Document | None:
    query = "SELECT * FROM documents WHERE (unit, kind, key) = (?, ?, ?) ORDER BY revision DESC LIMIT 1"
    row = ledger.execute(query, (unit, kind, key)).fetchone()
    return None if row is None else _document(*row)


def _document(*row: Any) -> Document:
    """A row of the table, its body as a mapping again."""
    values = (*row[:-1], json.loads(row[-1]))
    return Document(*values)
