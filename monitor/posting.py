"""Sending what is due: claimed, sent, marked, one by one, so that a kill neither loses nor doubles any."""

from __future__ import annotations

import hashlib
from collections.abc import Collection, Sequence
from dataclasses import asdict, dataclass
from datetime import datetime, timedelta
from pathlib import Path

from ingest import database, outbox
from ingest.errors import OutletError
from ingest.outbox import Notice
from ingest.unit import Target, Unit
from monitor.notices import address_of, digest, is_urgent, next_turn, trial
from monitor.sending import TIMEOUT_S, Undelivered, send

HOUR = timedelta(hours=1)
FIRST_PAUSE, LONGEST_PAUSE = timedelta(minutes=1), timedelta(hours=4)
PROBE = timedelta(
    minutes=15
)  # a target is tried so often while anything else waits for it, or what is urgent
GIVE_UP = timedelta(days=7)
GONE = "the unit file no longer names this target"
TOLD_FOR = timedelta(days=30)  # so long people are told of what was given up


@dataclass(frozen=True, slots=True)
class Posted:
    """What became of the notices of one target at one look.

    `sent` counts those that arrived now, digests as one, `waiting` those that still wait; `trouble` is why
    the last one did not arrive, empty where all did; `given_up` are the subjects of those of the last 30 days
    that never did.
    """

    unit: str
    target: str
    sent: int
    waiting: int
    trouble: str
    given_up: tuple[str, ...]


def post(
    units: Collection[Unit], store: Path, now: datetime, *, timeout_s: float = TIMEOUT_S
) -> tuple[Posted, ...]:
    """Send what is due to every target of some units.

    Parameters
    ----------
    units : collection of Unit
    store : Path
        Folder of the store.
    now : datetime
        With a zone.
    timeout_s : float
        For each answer of a server [s].

    Returns
    -------
    tuple of Posted
        One for each target, and for each that a unit file no longer names while notices wait for it.
    """
    named = [(unit, target) for unit in units for target in unit.targets]
    posted = [_post(store, unit, target, now, timeout_s) for unit, target in named]
    with database.reading(store) as ledger:
        waited_for = outbox.targets(ledger)
    keys = {unit.key for unit in units}
    gone = set(waited_for) - {address_of(unit, target) for unit, target in named}
    return (*posted, *(_gone(store, one, now) for one in sorted(gone) if one.partition("/")[0] in keys))


def _post(store: Path, unit: Unit, target: Target, now: datetime, timeout_s: float) -> Posted:
    """Send to one target until nothing is due, the hour is full, or it takes nothing."""
    address, sent, trouble = address_of(unit, target), 0, ""
    while (notice := _claimed(store, address, target.per_hour, now)) is not None:
        fault = _sent(store, notice, target, now, timeout_s)
        sent += fault is None
        trouble = str(fault) if fault else trouble
        if fault is not None and fault.is_unreachable:
            break
    return _told(store, address, sent, trouble, now)


def _gone(store: Path, address: str, now: datetime) -> Posted:
    """Let notices wait for a target that the unit file no longer names, as for one that takes none."""
    with database.writing(store) as ledger:
        for one in outbox.due(ledger, address, now - GIVE_UP):
            outbox.failed(ledger, one.id, GONE, for_good=True)
    return _told(store, address, 0, GONE, now)


def _told(store: Path, address: str, sent: int, trouble: str, now: datetime) -> Posted:
    """Tell how it stands with a target."""
    with database.reading(store) as ledger:
        listed = outbox.listed(ledger, address, now - TOLD_FOR)
    given_up = tuple(str(one.body["subject"]) for one in listed if one.state == outbox.GIVEN_UP)
    waiting = [one for one in listed if one.state == outbox.WAITING]
    # What is at rest after a failure has the reason with it, also where nothing was tried just now.
    trouble = trouble or next((one.last_error for one in waiting if one.last_error), "")
    unit, _, name = address.partition("/")
    return Posted(unit, name, sent, len(waiting), trouble, given_up)


def _claimed(store: Path, address: str, per_hour: int, now: datetime) -> Notice | None:
    """Claim what goes to a target next; too many become one digest in the same commit."""
    with database.reading(store) as ledger:
        if not outbox.due(ledger, address, now):
            return None  # a look that has nothing to do writes nothing
    with database.writing(store) as ledger:
        sent = outbox.sent_since(ledger, address, now - HOUR)
        turn = next_turn(outbox.due(ledger, address, now), sent, per_hour)
        if turn.join:
            letter = digest(turn.join, now)
            outbox.put(ledger, **asdict(letter))
            outbox.join(ledger, letter.notice, [one.id for one in turn.join])
            turn = next_turn(outbox.due(ledger, address, now), sent, per_hour)
        if turn.send is not None:
            outbox.claim(ledger, turn.send.id, now + _rest(turn.send))
    return turn.send


def _sent(store: Path, notice: Notice, target: Target, now: datetime, timeout_s: float) -> Undelivered | None:
    """Send a notice that is claimed and keep what became of it."""
    try:
        send(notice, target, now, timeout_s)
    except Undelivered as fault:
        with database.writing(store) as ledger:
            outbox.failed(ledger, notice.id, str(fault), for_good=now - notice.made > GIVE_UP)
            if fault.is_unreachable:
                outbox.hold_back(ledger, notice.target, now + min(_rest(notice), PROBE))
        return fault
    with database.writing(store) as ledger:
        outbox.arrived(ledger, notice.id, now)
    return None


def _rest(notice: Notice) -> timedelta:
    """How long a notice rests before its next try."""
    return pause(notice.id, notice.tries, longest=PROBE if is_urgent(notice) else LONGEST_PAUSE)


def pause(notice: str, tries: int, *, longest: timedelta = LONGEST_PAUSE) -> timedelta:
    """Give the time to the next try: doubled with each, and spread so that not all come at once.

    Parameters
    ----------
    notice : str
        Its id, which decides on the spread: a resend is as predictable as a first try.
    tries : int
        Before the one that is made now.
    longest : timedelta
        Where doubling ends.

    Returns
    -------
    timedelta
        A minute at first; half of it and up to half as much again.
    """
    spread = int.from_bytes(hashlib.sha256(f"{notice} {tries}".encode()).digest()[:4]) / 2**32
    plain: timedelta = min(FIRST_PAUSE * 2 ** min(tries, 16), longest)
    return plain * (0.5 + spread)


def post_trial(
    units: Sequence[Unit], name: str, now: datetime, *, timeout_s: float = TIMEOUT_S
) -> tuple[str, ...]:
    """Send a notice that is only a test, to the targets of one name.

    Parameters
    ----------
    units : sequence of Unit
    name : str
        Of a target.
    now : datetime
        With a zone.
    timeout_s : float
        For each answer of a server [s].

    Returns
    -------
    tuple of str
        What went wrong, by target; none if all arrived. A test is not tried again.
    """
    found = [(unit, target) for unit in units for target in unit.targets if target.name == name]
    if not found:
        names = sorted({target.name for unit in units for target in unit.targets})
        raise OutletError(
            f"no target is called '{name}'",
            remedy=f"Name one of {', '.join(names)}." if names else "Write a section [[notify]].",
        )
    said = []
    for unit, target in found:
        letter = trial(unit, target, now)
        notice = Notice(
            letter.notice, now, letter.kind, letter.target, letter.body, outbox.WAITING, 0, now, "", None, ""
        )
        try:
            send(notice, target, now, timeout_s)
        except Undelivered as fault:
            said.append(f"{letter.target}: {fault}")
    return tuple(said)
