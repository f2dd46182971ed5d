"""The outbox: notices that wait to be sent, each under the one id it will always have.

A notice is put in by the commit that it tells of. It is claimed before it is sent: whoever dies while sending
leaves it waiting, to be sent again under the same id.
"""

from __future__ import annotations

import json
import sqlite3
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from datetime import datetime
from typing import Any

from ingest.database import stamp

WAITING, SENT, GIVEN_UP, JOINED = "waiting", "sent", "given up", "joined"
_COLUMNS = "id, made, kind, target, body, state, tries, next_try, last_error, sent_at, joined_in"


@dataclass(frozen=True, slots=True)
class Notice:
    """One notice: who gets it, what it says, how often it was tried and when it may be tried next.

    `joined_in` is the id of the digest that it went out with, else empty.
    """

    id: str
    made: datetime
    kind: str
    target: str
    body: Mapping[str, Any]
    state: str
    tries: int
    next_try: datetime
    last_error: str
    sent_at: datetime | None
    joined_in: str


def put(
    ledger: sqlite3.Connection,
    *,
    notice: str,
    kind: str,
    target: str,
    body: Mapping[str, Any],
    made: datetime,
    not_before: datetime,
) -> None:
    """Put a notice in, as a step of an open transaction; one that is there stays as it is.

    Parameters
    ----------
    ledger : sqlite3.Connection
        In a transaction that may write.
    notice : str
        Its id.
    kind, target : str
    body : mapping of str
        What JSON knows; no secret.
    made, not_before : datetime
        With a zone.
    """
    text = json.dumps(dict(body), ensure_ascii=False, allow_nan=False, sort_keys=True)
    ledger.execute(
        "INSERT OR IGNORE INTO outbox (id, made, kind, target, body, next_try) VALUES (?, ?, ?, ?, ?, ?)",
        (notice, stamp(made), kind, target, text, stamp(not_before)),
    )


def due(ledger: sqlite3.Connection, target: str, now: datetime) -> tuple[Notice, ...]:
    """List what is to be sent to a target now.

    Parameters
    ----------
    ledger : sqlite3.Connection
    target : str
    now : datetime
        With a zone.

    Returns
    -------
    tuple of Notice
        Oldest first.
    """
    return _where(ledger, "target = ? AND state = 'waiting' AND next_try <= ?", (target, stamp(now)))


def listed(ledger: sqlite3.Connection, target: str, since: datetime) -> tuple[Notice, ...]:
    """List what waits for a target, however old, and what became of all that was made since an instant.

    Parameters
    ----------
    ledger : sqlite3.Connection
    target : str
    since : datetime
        With a zone.

    Returns
    -------
    tuple of Notice
        Oldest first.
    """
    return _where(ledger, "target = ? AND (state = 'waiting' OR made >= ?)", (target, stamp(since)))


def targets(ledger: sqlite3.Connection) -> tuple[str, ...]:
    """List the targets that notices wait for.

    Parameters
    ----------
    ledger : sqlite3.Connection

    Returns
    -------
    tuple of str
        By name.
    """
    query = "SELECT DISTINCT target FROM outbox WHERE state = 'waiting' ORDER BY target"
    return tuple(target for (target,) in ledger.execute(query))


def sent_since(ledger: sqlite3.Connection, target: str, since: datetime) -> int:
    """Count what has reached a target since an instant.

    Parameters
    ----------
    ledger : sqlite3.Connection
    target : str
    since : datetime
        With a zone.

    Returns
    -------
    int
    """
    query = "SELECT count(*) FROM outbox WHERE target = ? AND state = 'sent' AND sent_at > ?"
    return int(ledger.execute(query, (target, stamp(since))).fetchone()[0])


def join(ledger: sqlite3.Connection, digest: str, notices: Iterable[str]) -> None:
    """Mark notices as going out with a digest; they are not sent by themselves any more.

    Parameters
    ----------
    ledger : sqlite3.Connection
        In the transaction that puts the digest in.
    digest : str
        Its id.
    notices : iterable of str
        Their ids; none of them was ever tried.
    """
    ledger.executemany(
        "UPDATE outbox SET state = 'joined', joined_in = ? WHERE id = ? AND state = 'waiting' AND tries = 0",
        [(digest, one) for one in notices],
    )


def claim(ledger: sqlite3.Connection, notice: str, next_try: datetime) -> None:
    """Claim a notice before it is sent: it counts as tried, and nobody else sends it until then.

    Parameters
    ----------
    ledger : sqlite3.Connection
        In the transaction that found it due.
    notice : str
        Its id.
    next_try : datetime
        With a zone; when it is sent again if nobody tells what became of it.
    """
    ledger.execute(
        "UPDATE outbox SET tries = tries + 1, next_try = ? WHERE id = ? AND state = 'waiting'",
        (stamp(next_try), notice),
    )


def arrived(ledger: sqlite3.Connection, notice: str, at: datetime) -> None:
    """Mark a notice as sent.

    Parameters
    ----------
    ledger : sqlite3.Connection
        In a transaction that may write.
    notice : str
        Its id.
    at : datetime
        With a zone.
    """
    ledger.execute(
        "UPDATE outbox SET state = 'sent', sent_at = ?, last_error = '' WHERE id = ?", (stamp(at), notice)
    )


def failed(ledger: sqlite3.Connection, notice: str, words: str, *, for_good: bool) -> None:
    """Mark a notice as not sent, with the reason.

    Parameters
    ----------
    ledger : sqlite3.Connection
        In a transaction that may write.
    notice : str
        Its id.
    words : str
        What went wrong; no secret.
    for_good : bool
        Whether it is given up; else it waits for its next try.
    """
    ledger.execute(
        "UPDATE outbox SET state = ?, last_error = ? WHERE id = ? AND state = 'waiting'",
        (GIVEN_UP if for_good else WAITING, words, notice),
    )


def hold_back(ledger: sqlite3.Connection, target: str, until: datetime) -> None:
    """Let everything wait that is meant for a target which cannot be reached.

    Parameters
    ----------
    ledger : sqlite3.Connection
        In a transaction that may write.
    target : str
    until : datetime
        With a zone.
    """
    at = stamp(until)
    ledger.execute(
        "UPDATE outbox SET next_try = ? WHERE target = ? AND state = 'waiting' AND next_try < ?",
        (at, target, at),
    )


def _where(ledger: sqlite3.Connection, what: str, values: tuple[str, ...]) -> tuple[Notice, ...]:
    query = f"SELECT {_COLUMNS} FROM outbox WHERE {what} ORDER BY made, id"  # noqa: S608 - our own words
    return tuple(_notice(*row) for row in ledger.execute(query, values))


def _notice(*row: Any) -> Notice:
    """A row of the table, its body and times as they were."""
    identity, made, kind, target, body, state, tries, next_try, error, sent_at, joined_in = row
    return Notice(
        id=identity,
        made=datetime.fromisoformat(made),
        kind=kind,
        target=target,
        body=json.loads(body),
        state=state,
        tries=tries,
        next_try=datetime.fromisoformat(next_try),
        last_error=error,
        sent_at=datetime.fromisoformat(sent_at) if sent_at else None,
        joined_in=joined_in,
    )
