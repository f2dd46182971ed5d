"""The alert desk: reads the alerts of a store with where they stand, and writes what people do about them."""

from __future__ import annotations

import sqlite3
from collections.abc import Iterable, Mapping
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any

from ingest import documents, journal
from ingest.documents import Document
from ingest.errors import StoreError
from ingest.journal import Line
from monitor.alerts import (
    CAUSES,
    CLOSE,
    KIND,
    LONGEST_SHELF,
    NORMAL,
    NOTE,
    OUT_OF_SERVICE,
    REST,
    RESUME,
    SHELVE,
    SHELVED,
    TAKE,
    UNSHELVE,
    Alert,
    State,
    fold,
    from_body,
    subject_of_watch,
)


def known(folder: Path, unit: str) -> tuple[Alert, ...]:
    """Give every alert that a unit ever had, as the last pass left it.

    Parameters
    ----------
    folder : Path
        The store.
    unit : str
        Key of the unit.

    Returns
    -------
    tuple of Alert
        By number.
    """
    latest = {one.key: one for one in documents.revisions(folder, unit, KIND)}
    return tuple(sorted((from_body(one.body) for one in latest.values()), key=lambda alert: alert.number))


def put(ledger: sqlite3.Connection, alerts: Iterable[Alert]) -> tuple[Document, ...]:
    """Keep new and changed alerts as a step of the commit of a pass.

    Parameters
    ----------
    ledger : sqlite3.Connection
        In the transaction of the commit.
    alerts : iterable of Alert
        From `register.registered`.

    Returns
    -------
    tuple of Document
        The latest revision of each.
    """
    return tuple(
        documents.put(ledger, unit=alert.unit, kind=KIND, key=alert.id, body=alert.body()) for alert in alerts
    )


def read(folder: Path, unit: str, now: datetime) -> tuple[tuple[Alert, State], ...]:
    """Give every alert of a unit with where it stands.

    Parameters
    ----------
    folder : Path
        The store.
    unit : str
        Key of the unit.
    now : datetime
        With a zone.

    Returns
    -------
    tuple of (Alert, State)
        By number.
    """
    alerts = known(folder, unit)
    lines = journal.lines(folder, unit=unit)
    by_subject: dict[str, list[Line]] = {}
    for line in lines:
        by_subject.setdefault(line.subject, []).append(line)
    none: list[Line] = []
    return tuple(
        (
            one,
            fold(
                one,
                [*by_subject.get(one.id, none), *by_subject.get(subject_of_watch(one.watch), none)],
                now,
            ),
        )
        for one in alerts
    )


def find(folder: Path, alert_id: str, now: datetime) -> tuple[Alert, State]:
    """Find one alert by its id.

    Parameters
    ----------
    folder : Path
        The store.
    alert_id : str
        As `line3-17`.
    now : datetime
        With a zone.

    Returns
    -------
    Alert
    State

    Raises
    ------
    StoreError
        There is no such alert.
    """
    unit = alert_id.rpartition("-")[0]
    kept = documents.latest(folder, unit, KIND, alert_id)
    if kept is None:
        raise StoreError(
            f"alert {alert_id}: there is none in {folder}", remedy="List them: outlet alerts list --all"
        )
    alert = from_body(kept.body)
    return alert, fold(alert, journal.lines(folder, unit=unit), now)


def history(folder: Path, alert: Alert) -> tuple[tuple[datetime, Alert], ...]:
    """Give what an alert was at each pass that changed it.

    Parameters
    ----------
    folder : Path
        The store.
    alert : Alert
        One of them.

    Returns
    -------
    tuple of (datetime, Alert)
        When it was written, oldest first.
    """
    found = documents.revisions(folder, alert.unit, KIND, alert.id)
    return tuple((datetime.fromisoformat(one.made), from_body(one.body)) for one in found)


def take(folder: Path, alert_id: str, who: str, *, note: str = "", now: datetime | None = None) -> Line:
    """Take an alert: say that somebody looks after it.

    Parameters
    ----------
    folder : Path
        The store.
    alert_id, who : str
        Which, and who takes it.
    note : str
        What they have to say.
    now : datetime or None
        None for the present.

    Returns
    -------
    Line
        Of the journal.
    """
    alert, state = find(folder, alert_id, _present(now))
    if state.condition == NORMAL:
        raise _senseless(alert, "is back to normal, there is nothing to take", "See it: outlet alerts show")
    return _write(folder, alert, TAKE, who, note, now=now)


def shelve(
    folder: Path,
    alert_id: str,
    who: str,
    *,
    reason: str,
    length: timedelta = LONGEST_SHELF,
    now: datetime | None = None,
) -> Line:
    """Shelve an alert for some hours, with the reason; it comes back by itself.

    Parameters
    ----------
    folder : Path
        The store.
    alert_id, who, reason : str
        Which, who, why.
    length : timedelta
        At most a shift.
    now : datetime or None
        None for the present.

    Returns
    -------
    Line
        Of the journal.
    """
    alert, state = find(folder, alert_id, _present(now))
    if not timedelta(0) < length <= LONGEST_SHELF:
        hours = LONGEST_SHELF // timedelta(hours=1)
        raise _senseless(alert, f"cannot be shelved for {length}", f"Shelve it for up to {hours} h.")
    if not reason.strip():
        raise _senseless(alert, "is not shelved without a reason", "Say why.")
    if state.condition in (NORMAL, OUT_OF_SERVICE):
        raise _senseless(alert, f"is {state.condition}, there is nothing to shelve", "Leave it as it is.")
    until = (_present(now) + length).isoformat(timespec="seconds")
    return _write(folder, alert, SHELVE, who, reason, now=now, detail={"until": until})


def unshelve(folder: Path, alert_id: str, who: str, *, note: str = "", now: datetime | None = None) -> Line:
    """Bring a shelved alert back before its time.

    Parameters
    ----------
    folder : Path
        The store.
    alert_id, who, note : str
        Which, who, and what they have to say.
    now : datetime or None
        None for the present.

    Returns
    -------
    Line
        Of the journal.
    """
    alert, state = find(folder, alert_id, _present(now))
    if state.condition != SHELVED:
        raise _senseless(alert, f"is {state.condition}, not shelved", "Leave it as it is.")
    return _write(folder, alert, UNSHELVE, who, note, now=now)


def add_note(folder: Path, alert_id: str, who: str, text: str, *, now: datetime | None = None) -> Line:
    """Write a note to an alert, whatever its condition.

    Parameters
    ----------
    folder : Path
        The store.
    alert_id, who, text : str
        Which, who, and the note.
    now : datetime or None
        None for the present.

    Returns
    -------
    Line
        Of the journal.
    """
    alert, _ = find(folder, alert_id, _present(now))
    if not text.strip():
        raise _senseless(alert, "gets no empty note", "Write what there is to say.")
    return _write(folder, alert, NOTE, who, text, now=now)


def close(
    folder: Path, alert_id: str, who: str, *, cause: str, note: str = "", now: datetime | None = None
) -> Line:
    """Close an alert with the cause that was found; closing it again with another cause corrects that.

    Parameters
    ----------
    folder : Path
        The store.
    alert_id, who : str
        Which, and who.
    cause : str
        One of `alerts.CAUSES`.
    note : str
        What they have to say.
    now : datetime or None
        None for the present.

    Returns
    -------
    Line
        Of the journal.
    """
    alert, state = find(folder, alert_id, _present(now))
    if cause not in CAUSES:
        raise _senseless(alert, f"cannot be closed as {cause!r}", f"Write one of {', '.join(CAUSES)}.")
    if state.closed_as == cause:
        raise _senseless(alert, f"is closed as {cause} already", "Leave it as it is.")
    return _write(folder, alert, CLOSE, who, note, now=now, detail={"cause": cause})


def rest(folder: Path, unit: str, watch: str, who: str, *, reason: str, now: datetime | None = None) -> Line:
    """Take a watch out of service: its alerts ask for nobody until it is back.

    Parameters
    ----------
    folder : Path
        The store.
    unit, watch, who, reason : str
        Key of the unit, name of the watch, who, why.
    now : datetime or None
        None for the present.

    Returns
    -------
    Line
        Of the journal.
    """
    if not reason.strip():
        raise StoreError(f"watch {watch}: is not taken out of service without a reason", remedy="Say why.")
    return journal.write(
        folder, who=who, act=REST, unit=unit, subject=subject_of_watch(watch), note=reason, at=now
    )


def resume(folder: Path, unit: str, watch: str, who: str, *, now: datetime | None = None) -> Line:
    """Bring a watch back into service.

    Parameters
    ----------
    folder : Path
        The store.
    unit, watch, who : str
        Key of the unit, name of the watch, who.
    now : datetime or None
        None for the present.

    Returns
    -------
    Line
        Of the journal.
    """
    return journal.write(folder, who=who, act=RESUME, unit=unit, subject=subject_of_watch(watch), at=now)


def _present(now: datetime | None) -> datetime:
    return datetime.now(UTC) if now is None else now


def _senseless(alert: Alert, what: str, remedy: str) -> StoreError:
    return StoreError(f"alert {alert.id}: {what}", remedy=remedy)


def _write(
    folder: Path,
    alert: Alert,
    act: str,
    who: str,
    note: str,
    *,
    now: datetime | None,
    detail: Mapping[str, Any] = journal.NOTHING,
) -> Line:
    return journal.write(
        folder, who=who, act=act, unit=alert.unit, subject=alert.id, note=note, detail=detail, at=now
    )
