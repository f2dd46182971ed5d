"""Notices: what a pass changed in the alerts becomes what each target is told, when, and under which id."""

from __future__ import annotations

import hashlib
import math
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from datetime import UTC, datetime, time, timedelta
from typing import Any
from zoneinfo import ZoneInfo

from ingest.outbox import Notice
from ingest.unit import PRIORITIES, Target, Unit
from monitor.alerts import OUT_OF_SERVICE, SHELVED, Alert, Group, State, grouped
from monitor.noticetext import EVENTS, Change, in_words, subject_of, together, trial_words

RAISED, VERDICT, CLEARED, WITHDRAWN = EVENTS
DIGEST, TEST = "digest", "test"


@dataclass(frozen=True, slots=True)
class Letter:
    """One notice as it goes into the outbox; fields as `outbox.put` wants them."""

    notice: str
    kind: str
    target: str
    body: Mapping[str, Any]
    made: datetime
    not_before: datetime


def event_of(before: Alert | None, after: Alert) -> str:
    """Say what people have to be told of an alert that has changed.

    Parameters
    ----------
    before : Alert or None
        As it was; None for a new one.
    after : Alert
        As it is.

    Returns
    -------
    str
        One of `EVENTS`, or empty. Nobody is told of what is past or suppressed by design; whoever was told
        that an alert was raised is told of its end.
    """
    if before is None or not _counts(before):
        return RAISED if _counts(after) else ""
    if not _counts(after):
        return WITHDRAWN
    if before.active is not after.active:
        return RAISED if after.active else CLEARED
    moved = (before.cause, before.suspects) != (after.cause, after.suspects)
    return VERDICT if after.active and moved else ""


def _counts(alert: Alert) -> bool:
    """Whether somebody has to act on it, or had to."""
    return not (alert.past or alert.suppressed or alert.withdrawn)


def letters(
    unit: Unit, changes: Iterable[Change], revisions: Mapping[str, int], now: datetime
) -> tuple[Letter, ...]:
    """Write the notices of one pass: one for each group of alerts and each target that is told of them.

    Parameters
    ----------
    unit : Unit
        With its targets.
    changes : iterable of Change
        Those of one pass that people have to be told of.
    revisions : mapping of str to int
        By id of the alert: the revision that this pass made.
    now : datetime
        With a zone; the clock of the pass.

    Returns
    -------
    tuple of Letter
        None for alerts that are shelved or out of service.
    """
    told = [change for change in changes if change.state.condition not in (SHELVED, OUT_OF_SERVICE)]
    return tuple(
        _letter(unit, target, group, revisions, now)
        for target in unit.targets
        for group in _groups([one for one in told if one.alert.priority in target.priorities])
    )


def _groups(changes: Sequence[Change]) -> list[list[Change]]:
    """Changes by the group of their alerts, the head first."""
    by_id = {change.alert.id: change for change in changes}

    def members(group: Group) -> list[tuple[Alert, State]]:
        return [group.head, *group.others]

    found = grouped([(change.alert, change.state) for change in changes])
    return [[by_id[alert.id] for alert, _ in members(group)] for group in found]


def _letter(
    unit: Unit, target: Target, group: Sequence[Change], revisions: Mapping[str, int], now: datetime
) -> Letter:
    """One group of changes as a notice to one target."""
    event = min((change.event for change in group), key=EVENTS.index)
    priority = min((change.alert.priority for change in group), key=PRIORITIES.index)
    address = address_of(unit, target)
    said = sorted(f"{one.alert.id} {revisions[one.alert.id]} {one.event}" for one in group)
    body = {
        "event": event,
        "unit": unit.key,
        "name": unit.name,
        "priority": priority,
        "urgent": priority in target.quiet_exempt,
        "subject": subject_of(unit, group),
        "text": in_words(unit, group, page=target.page, now=now),
        "alerts": [_data(change, revisions[change.alert.id]) for change in group],
    }
    start = now if body["urgent"] else end_of_quiet(target.quiet, unit.time_zone, now)
    return Letter(identity(address, *said), event, address, body, now, start)


def _data(change: Change, revision: int) -> dict[str, Any]:
    """One alert for programs; a number that is not known is null."""
    seen = change.shown
    numbers = {"value": seen.value, "half_width": seen.half_width}
    return {
        **change.alert.body(),
        "event": change.event,
        "revision": revision,
        "figure_unit": seen.unit,
        "window_end": seen.end.isoformat() if seen.end else None,
        **{name: number if math.isfinite(number) else None for name, number in numbers.items()},
    }


def address_of(unit: Unit, target: Target) -> str:
    """Name a target of a unit in the outbox.

    Parameters
    ----------
    unit : Unit
    target : Target
        Of this unit.

    Returns
    -------
    str
        Another one for the target of that name of another unit.
    """
    return f"{unit.key}/{target.name}"


def identity(*said: str) -> str:
    """Give the id of a notice: the same words have the same one, whenever it is worked out.

    Parameters
    ----------
    *said : str
        The target, then what the notice is about.

    Returns
    -------
    str
        128 bits in hexadecimal digits.
    """
    return hashlib.sha256("\n".join(said).encode()).hexdigest()[:32]


def end_of_quiet(quiet: tuple[time, time] | None, zone: str, now: datetime) -> datetime:
    """Give the moment from which a notice may go out.

    Parameters
    ----------
    quiet : tuple of time or None
        From, to, by the plant's clock; over midnight where the second is earlier.
    zone : str
        The plant's time zone.
    now : datetime
        With a zone.

    Returns
    -------
    datetime
        `now` outside quiet hours.
    """
    local = now.astimezone(ZoneInfo(zone))
    if quiet is None or not _is_within(quiet, local.time()):
        return now
    # By the instant: where clocks are put back the same wall time comes twice, and the next one ends it.
    ends = (
        datetime.combine(local.date() + timedelta(days=day), quiet[1], local.tzinfo).replace(fold=fold)
        for day in (0, 1)
        for fold in (0, 1)
    )
    return min(end for one in ends if (end := one.astimezone(UTC)) > now)


def _is_within(quiet: tuple[time, time], clock: time) -> bool:
    first, last = quiet
    return first <= clock < last if first < last else clock >= first or clock < last


@dataclass(frozen=True, slots=True)
class Turn:
    """What is to be done for a target now: send one notice, or first join some into a digest; or nothing."""

    send: Notice | None = None
    join: tuple[Notice, ...] = ()


def next_turn(due: Sequence[Notice], sent: int, per_hour: int) -> Turn:
    """Choose what goes to a target next, so that no hour has more than so many.

    Parameters
    ----------
    due : sequence of Notice
        What may be sent now.
    sent : int
        How many arrived within the last hour.
    per_hour : int
        How many may.

    Returns
    -------
    Turn
        Urgent ones go first, and the last place of an hour is kept for them; what would not fit is joined.
        What was ever tried may have arrived, so that it only goes under its own id.
    """
    for urgent in (True, False):
        waiting = [one for one in due if is_urgent(one) is urgent]
        room = per_hour - sent - (not urgent)
        fresh = tuple(one for one in waiting if one.tries == 0 and one.kind != DIGEST)
        if waiting and room > 0:
            tried = [one for one in waiting if one not in fresh]
            if not tried and len(fresh) > room == 1:
                return Turn(join=fresh)
            return Turn(send=(tried or waiting)[0])
    return Turn()


def is_urgent(notice: Notice) -> bool:
    """Tell whether quiet hours do not hold a notice.

    Parameters
    ----------
    notice : Notice

    Returns
    -------
    bool
    """
    return bool(notice.body["urgent"])


def digest(notices: Sequence[Notice], now: datetime) -> Letter:
    """Join notices to one target into one, with an id of its own that follows from theirs.

    Parameters
    ----------
    notices : sequence of Notice
        At least one, to the same target.
    now : datetime
        With a zone.

    Returns
    -------
    Letter
    """
    first = notices[0]
    priority = min((one.body["priority"] for one in notices), key=PRIORITIES.index)
    body = {
        **{name: first.body[name] for name in ("unit", "name", "urgent")},
        "event": DIGEST,
        "priority": priority,
        "subject": f"{first.body['name']}: {len(notices)} notices in one",
        "text": together([(str(one.body["subject"]), str(one.body["text"])) for one in notices]),
        "alerts": [alert for one in notices for alert in one.body["alerts"]],
    }
    said = (first.target, DIGEST, *sorted(one.id for one in notices))
    return Letter(identity(*said), DIGEST, first.target, body, now, now)


def trial(unit: Unit, target: Target, now: datetime) -> Letter:
    """Write a notice that only shows that notices arrive.

    Parameters
    ----------
    unit : Unit
    target : Target
        Of this unit.
    now : datetime
        With a zone.

    Returns
    -------
    Letter
        Quiet hours do not hold it.
    """
    address = address_of(unit, target)
    body = {
        "event": TEST,
        "unit": unit.key,
        "name": unit.name,
        "priority": "low",
        "urgent": True,
        "subject": f"{unit.name}: test of notices",
        "text": trial_words(unit, now),
        "alerts": [],
    }
    return Letter(identity(address, TEST, now.isoformat()), TEST, address, body, now, now)
