"""The note from shift to shift: what people write, beside a list of what stands at the change of shift.

Shifts begin by the plant's clock, so one of them is an hour longer or shorter where that clock is changed.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import asdict, dataclass
from datetime import datetime, time, timedelta
from itertools import pairwise
from typing import Any
from zoneinfo import ZoneInfo

import numpy as np
from numpy.typing import NDArray

from ingest.cells import Cells
from ingest.conditions import CONDITIONS, takes_part
from ingest.journal import Line
from ingest.unit import Unit
from monitor import wording
from monitor.alerts import ACKNOWLEDGED, OUT_OF_SERVICE, SHELVED, SUPPRESSED, Alert, State
from monitor.board import Row
from monitor.verdict import CANNOT, Verdict

ACT = "shift note"  # of a line in the journal
LEAST_OUT = timedelta(minutes=30)  # an instrument that is back is told of when it was out for so long
DAY = timedelta(days=1)
INSTANT = timedelta(microseconds=1)


@dataclass(frozen=True, slots=True)
class Shift:
    """A shift from its first instant to before its last, UTC."""

    first: datetime
    last: datetime

    @property
    def subject(self) -> str:
        """Name it as the subject of a line in the journal."""
        return f"shift {self.first.isoformat(timespec='minutes')}"


def shift_at(starts: Sequence[time], zone: str, moment: datetime) -> Shift:
    """Give the shift that a moment lies in.

    Parameters
    ----------
    starts : sequence of time
        When the shifts of a day begin, plant time.
    zone : str
        IANA name of the plant's zone.
    moment : datetime
        Zone-aware.

    Returns
    -------
    Shift
    """
    plant = ZoneInfo(zone)
    today = moment.astimezone(plant).date()
    edges = sorted(
        {
            datetime.combine(today + day * DAY, start, plant).astimezone(ZoneInfo("UTC"))
            for day in (-1, 0, 1, 2)
            for start in starts
        }
    )
    return next(Shift(first, last) for first, last in pairwise(edges) if first <= moment < last)


def notes_of(lines: Iterable[Line], shift: Shift) -> tuple[Line, ...]:
    """Give the notes of one shift.

    Parameters
    ----------
    lines : iterable of Line
        Of the journal.
    shift : Shift
        Whose.

    Returns
    -------
    tuple of Line
        In the order of writing.
    """
    return tuple(line for line in lines if line.act == ACT and line.subject == shift.subject)


def last_notes(lines: Sequence[Line], before: Shift) -> tuple[Line, ...]:
    """Give the notes of the last shift that left any.

    Parameters
    ----------
    lines : sequence of Line
        Of the journal.
    before : Shift
        Only earlier shifts count.

    Returns
    -------
    tuple of Line
        In the order of writing; empty when no earlier shift left a note.
    """
    earlier = [
        line
        for line in lines
        if line.act == ACT and datetime.fromisoformat(line.detail["from"]) < before.first
    ]
    latest = max((line.detail["from"] for line in earlier), default="")
    return tuple(line for line in earlier if line.detail["from"] == latest)


@dataclass(frozen=True, slots=True)
class Out:
    """An instrument, or a whole analyzer, whose readings did not count, in words; times UTC."""

    name: str
    words: str
    since: datetime
    length: timedelta
    still: bool


def outages(unit: Unit, cells: Cells) -> tuple[Out, ...]:
    """Find the instruments whose readings do not count now, or did not for half an hour.

    Parameters
    ----------
    unit : Unit
        Its instruments.
    cells : Cells
        Of the shift; not changed.

    Returns
    -------
    tuple of Out
        Those that are out now first; channels of one analyzer that went out together stand as one.
    """
    found = [
        one
        for column, instrument in enumerate(unit.instruments)
        if instrument.tag is not None
        for one in _outage(unit, instrument.name, cells.start, cells.condition[:, column])
    ]
    return tuple(sorted(_as_analyzers(unit, found), key=lambda one: (not one.still, one.since, one.name)))


def _outage(unit: Unit, name: str, start_us: NDArray[np.int64], condition: NDArray[np.int8]) -> Iterator[Out]:
    """The time one instrument was out, if there is any to tell of."""
    out = ~takes_part(condition)
    length = int(out.sum()) * unit.cell
    still = bool(out[-1]) if len(out) else False
    if not still and length < LEAST_OUT:
        return
    codes, count = np.unique(condition[out], return_counts=True)
    seen = np.flatnonzero(~out)
    first = (seen[-1] + 1 if len(seen) else 0) if still else np.flatnonzero(out)[0]
    yield Out(name, CONDITIONS[codes[count.argmax()]], wording.utc(start_us[first]), length, still)


def _as_analyzers(unit: Unit, found: Sequence[Out]) -> Iterator[Out]:
    """Put all channels of an analyzer that went out alike together under its name."""
    home = {one.name: one.analyzer or "" for one in unit.instruments}
    size = {name: list(home.values()).count(name) for name in home.values()}
    alike: dict[tuple[Any, ...], list[Out]] = {}
    for one in found:
        whose = home[one.name] or one.name
        alike.setdefault((whose, one.words, one.since, one.length, one.still), []).append(one)
    for (whose, *facts), members in alike.items():
        signals = sum(one.name == f"{whose} status" for one in unit.instruments)
        if len(members) > 1 and len(members) >= size[whose] - signals:
            yield Out(whose, *facts)
        else:
            yield from members


@dataclass(frozen=True, slots=True)
class Moved:
    """A key figure of the last eight hours and of the eight hours before [its unit]."""

    label: str
    unit: str
    before: float
    now: float


def moved(rows: Sequence[Row], before: Mapping[str, tuple[float, float]], *, mode: str) -> tuple[Moved, ...]:
    """Choose the key figures that differ from those of the shift before by more than their half-width.

    Parameters
    ----------
    rows : sequence of Row
        As the first view shows them.
    before : mapping of str to (float, float)
        Figure -> value and 95 % half-width of the eight hours before; NaN where missing.
    mode : str
        Of these values.

    Returns
    -------
    tuple of Moved
    """
    found = []
    for row in rows:
        now = row.readings.get((timedelta(hours=8), mode))
        value, half = before.get(row.figure.name, (np.nan, np.nan))
        if now is not None and abs(now.value - value) > max(now.half_width, half):
            found.append(Moved(row.figure.label, row.figure.unit, value, now.value))
    return tuple(found)


@dataclass(frozen=True, slots=True)
class Standing:
    """What stands at a change of shift, each list as lines of text."""

    open: tuple[str, ...]
    shelved: tuple[str, ...]
    out: tuple[str, ...]
    moved: tuple[str, ...]
    watch: tuple[str, ...]


HEADINGS = {
    "open": "alerts open",
    "shelved": "shelved or out of service",
    "out": "instruments out",
    "moved": "moved since the shift before",
    "watch": "to watch",
}


def standing(
    unit: Unit,
    told: Sequence[tuple[Alert, State, str, Verdict | None]],
    rows: Sequence[Row],
    changes: Sequence[Moved],
    out: Sequence[Out],
) -> Standing:
    """Put together what the next shift has to know, in words.

    Parameters
    ----------
    unit : Unit
        One reactor.
    told : sequence of (Alert, State, str, Verdict or None)
        Alerts with where they stand, what they say in one line, and their verdict; worst first.
    rows : sequence of Row
        Key figures as the first view shows them.
    changes : sequence of Moved
        Of them, those that moved.
    out : sequence of Out
        Instruments whose readings do not count.

    Returns
    -------
    Standing
        Empty lists where there is nothing to tell.
    """
    resting = (SHELVED, OUT_OF_SERVICE)
    still = [one for one in told if one[1].open and one[1].condition != SUPPRESSED]
    return Standing(
        open=tuple(_open(*one) for one in still if one[1].condition not in resting),
        shelved=tuple(_resting(unit, *one[:2]) for one in still if one[1].condition in resting),
        out=tuple(_out(unit, one) for one in out),
        moved=tuple(_moved(one) for one in changes),
        watch=(*_near(rows), *_undecided(still)),
    )


def _open(alert: Alert, state: State, said: str, verdict: Verdict | None) -> str:
    by = f" by {state.who}" if state.condition == ACKNOWLEDGED else ""
    cause = f"; verdict: {verdict.word}" if verdict is not None else ""
    return f"{alert.id}, {alert.priority} priority, {state.condition}{by}: {said.rstrip('.')}{cause}"


def _resting(unit: Unit, alert: Alert, state: State) -> str:
    until = f" until {wording.local_time(state.until, unit.time_zone)}" if state.until else ""
    return f"{alert.id} ({alert.watch}): {state.condition} by {state.who}{until}"


def _out(unit: Unit, one: Out) -> str:
    if one.still:
        return f"{one.name}: {one.words} since {wording.local_time(one.since, unit.time_zone)}"
    return f"{one.name}: was {one.words} for {wording.duration(one.length)}, is back"


def _moved(one: Moved) -> str:
    size = wording.amount(one.now, float("nan"), one.unit)
    return f"{one.label}: {wording.amount(one.before, float('nan'), one.unit)} to {size}"


def _near(rows: Sequence[Row]) -> Iterator[str]:
    """Figures of which a limit lies inside the error bar."""
    for row in rows:
        if row.standing.kind == "near":
            yield f"{row.figure.label}: {row.standing.words}"


def _undecided(still: Sequence[tuple[Alert, State, str, Verdict | None]]) -> Iterator[str]:
    """Verdicts that are not final, and the reading that would settle one that is."""
    for alert, _, _, verdict in still:
        if verdict is not None and verdict.is_provisional:
            yield f"{alert.id}: the verdict is provisional until eight hours of data are there"
        elif verdict is not None and verdict.word == CANNOT and verdict.settle:
            yield f"{alert.id}: {verdict.settle[0]} would settle what moved"


def detail(shift: Shift, standing: Standing) -> dict[str, Any]:
    """Give what the journal keeps beside the text of a note.

    Parameters
    ----------
    shift : Shift
        Whose note it is.
    standing : Standing
        As it was when the note was written.

    Returns
    -------
    dict
        What JSON knows.
    """
    return {
        "from": shift.first.isoformat(timespec="minutes"),
        "to": shift.last.isoformat(timespec="minutes"),
        "list": {name: list(lines) for name, lines in asdict(standing).items()},
    }


def listed(stood: Mapping[str, Sequence[str]]) -> Iterator[tuple[str, Sequence[str]]]:
    """Give the lists of a note under the headings that people read.

    Parameters
    ----------
    stood : mapping of str to sequence of str
        As `detail` keeps it, or a `Standing` as a mapping.

    Yields
    ------
    tuple
        Heading and lines; what is empty is left out.
    """
    for name, heading in HEADINGS.items():
        if stood.get(name):
            yield heading, stood[name]
