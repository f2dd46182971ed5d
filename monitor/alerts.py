"""An alert: an episode as people were told of it, and its condition, folded from what they did about it.

The conditions and the ways between them are those of ISA-18.2 / IEC 62682. Whether a figure is beyond its
limit is worked out and comes from the store; what people did comes from the journal; the condition is a pure
function of both and of the time, so that recomputing loses nothing that was typed.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, fields
from datetime import datetime, timedelta
from typing import Any

from ingest.journal import Line
from ingest.unit import PRIORITIES

KIND = "alert"  # of the store's documents
CONDITIONS = (
    "unacknowledged",
    "acknowledged",
    "returned to normal unacknowledged",
    "shelved",
    "suppressed by design",
    "out of service",
    "normal",
)
UNACKNOWLEDGED, ACKNOWLEDGED, RETURNED, SHELVED, SUPPRESSED, OUT_OF_SERVICE, NORMAL = CONDITIONS
TAKE, SHELVE, UNSHELVE, NOTE, CLOSE = "acknowledge", "shelve", "unshelve", "note", "close"
REST, RESUME = "out of service", "back in service"
CAUSES = ("reactor", "instrument", "data", "planned", "false")
LONGEST_SHELF = timedelta(hours=8)  # at most a shift


@dataclass(frozen=True, slots=True)
class Alert:
    """One alert as the latest pass has it; times UTC, limit in the unit of the figure.

    `id` stays whatever late data do. `past` tells that it was over when it was first seen, in data that came
    late: nobody had to act. `withdrawn` says why there is no such episode any more; empty while there is.
    `cause` and `suspects` are the verdict's.
    """

    id: str
    unit: str
    watch: str
    figure: str
    window_h: float
    side: str
    limit: float
    priority: str
    first_crossed: datetime
    raised: datetime
    cleared: datetime | None
    suppressed: bool
    past: bool
    cause: str = ""
    suspects: tuple[str, ...] = ()
    withdrawn: str = ""

    @property
    def active(self) -> bool:
        """Tell whether the figure is still beyond the limit."""
        return self.cleared is None and not self.withdrawn

    @property
    def number(self) -> int:
        """Give the number that the id ends in."""
        return int(self.id.rpartition("-")[2])

    def body(self) -> dict[str, Any]:
        """Give what the store keeps of it.

        Returns
        -------
        dict
            What JSON knows; times as ISO 8601.
        """
        values = {field.name: getattr(self, field.name) for field in fields(self)}
        return {name: _kept(value) for name, value in values.items()}


def from_body(body: Mapping[str, Any]) -> Alert:
    """Make an alert of what the store keeps of it.

    Parameters
    ----------
    body : mapping
        As `Alert.body` gives it.

    Returns
    -------
    Alert
    """
    times = ("first_crossed", "raised", "cleared")
    read = {name: datetime.fromisoformat(body[name]) for name in times if body[name] is not None}
    return Alert(**{**body, **read, "suspects": tuple(body["suspects"])})


@dataclass(frozen=True, slots=True)
class State:
    """Where an alert stands: one of CONDITIONS, who brought it there and when it ends by itself.

    `lines` are the journal's lines about it, oldest first; `closed_as` is one of CAUSES, or empty.
    """

    condition: str
    who: str
    until: datetime | None
    closed_as: str
    lines: tuple[Line, ...]

    @property
    def open(self) -> bool:
        """Tell whether it still asks for somebody."""
        return self.condition != NORMAL


def subject_of_watch(watch: str) -> str:
    """Name a watch as the subject of a line in the journal.

    Parameters
    ----------
    watch : str
        Its name.

    Returns
    -------
    str
        Never the id of an alert.
    """
    return f"watch {watch}"


def fold(alert: Alert, lines: Iterable[Line], now: datetime) -> State:
    """Fold an alert and the journal into where the alert stands.

    Parameters
    ----------
    alert : Alert
        Its episode as it is known now.
    lines : iterable of Line
        The journal of its unit; lines about anything else are passed over.
    now : datetime
        With a zone.

    Returns
    -------
    State
        Out of service goes before shelved, that before suppressed by design, and all of them before what the
        episode and its acknowledgement say.
    """
    journal = tuple(lines)
    own = tuple(line for line in journal if line.subject == alert.id)
    rest = _last(journal, (REST, RESUME), subject_of_watch(alert.watch))
    shelf = _last(own, (SHELVE, UNSHELVE), alert.id)
    taken = _last(own, (TAKE, CLOSE), alert.id)
    closed = _last(own, (CLOSE,), alert.id)
    until = datetime.fromisoformat(shelf.detail["until"]) if shelf and shelf.act == SHELVE else None
    if rest is not None and rest.act == REST:
        condition, who, until = OUT_OF_SERVICE, rest.who, None
    elif shelf is not None and until is not None and now < until and not alert.withdrawn:
        condition, who = SHELVED, shelf.who
    elif alert.active and alert.suppressed:
        condition, who, until = SUPPRESSED, "", None
    else:
        condition, who, until = _asked(alert, taken), taken.who if taken else "", None
    return State(condition, who, until, closed.detail["cause"] if closed else "", own)


def _asked(alert: Alert, taken: Line | None) -> str:
    """What the episode and its acknowledgement come to."""
    if alert.active:
        return ACKNOWLEDGED if taken else UNACKNOWLEDGED
    return NORMAL if taken or alert.past or alert.suppressed or alert.withdrawn else RETURNED


def _last(lines: Sequence[Line], acts: Sequence[str], subject: str) -> Line | None:
    return next((one for one in reversed(lines) if one.act in acts and one.subject == subject), None)


def _kept(value: Any) -> Any:
    """A value as JSON knows it."""
    if isinstance(value, datetime):
        return value.isoformat()
    return list(value) if isinstance(value, tuple) else value


def worst_first(alert: Alert, state: State) -> tuple[int, int, float]:
    """Give the order in which people look at alerts.

    Parameters
    ----------
    alert : Alert
    state : State
        Where it stands.

    Returns
    -------
    tuple
        Sorts by condition, then priority, then the newest first.
    """
    age = -alert.raised.timestamp()
    return CONDITIONS.index(state.condition), PRIORITIES.index(alert.priority), age


@dataclass(frozen=True, slots=True)
class Group:
    """Alerts of one cause: the one that stands for all, and the others, each with its state."""

    head: tuple[Alert, State]
    others: tuple[tuple[Alert, State], ...] = ()

    @property
    def cause(self) -> str:
        """Give the verdict's word for all of them; empty when there is none."""
        return self.head[0].cause


JOINED = timedelta(hours=24)  # alerts of one cause that begin so close to one another, or overlap, are one


def grouped(found: Sequence[tuple[Alert, State]]) -> tuple[Group, ...]:
    """Put alerts of one cause together: one cause, one alert.

    Parameters
    ----------
    found : sequence of (Alert, State)
        In any order.

    Returns
    -------
    tuple of Group
        Worst first. Alerts belong together if the verdict gives them the same cause, shares a suspect, and
        their episodes overlap or begin within a day; "cannot tell" and no verdict stand alone.
    """
    ordered = sorted(found, key=lambda one: worst_first(*one))
    groups: list[list[tuple[Alert, State]]] = []
    for one in ordered:
        home = next((group for group in groups if _same(group[0], one)), None)
        if home is None:
            groups.append([one])
        else:
            home.append(one)
    return tuple(Group(group[0], tuple(group[1:])) for group in groups)


def _same(head: tuple[Alert, State], other: tuple[Alert, State]) -> bool:
    """Whether two alerts have one cause."""
    (one, state), (two, second) = head, other
    if one.cause not in ("reactor", "instrument") or one.cause != two.cause or one.unit != two.unit:
        return False
    if state.open != second.open or not _together(one, two):
        return False
    return one.cause == "reactor" or bool(set(one.suspects) & set(two.suspects))


def _together(one: Alert, two: Alert) -> bool:
    """Whether two episodes overlap or begin within a day."""
    first, later = sorted((one, two), key=lambda alert: alert.first_crossed)
    return first.cleared is None or later.first_crossed <= max(first.cleared, first.first_crossed + JOINED)
