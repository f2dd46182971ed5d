"""The words of a notice: what somebody needs at three in the morning, in plain lines."""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from datetime import datetime, timedelta
from urllib.parse import quote

from ingest.unit import Unit
from monitor import wording
from monitor.alerts import Alert, State
from monitor.tellverdict import headline
from monitor.verdict import Verdict

EVENTS = ("raised", "verdict", "cleared", "withdrawn")  # the worst first
MOST_CHECKS = 3  # the likeliest suspects; the rest is told by `outlet alerts show`
NO_VERDICT = "not yet told; it takes eight hours from the onset, and another notice follows"


@dataclass(frozen=True, slots=True)
class Shown:
    """A figure in its newest window, in its unit; NaN and the reason where it is missing."""

    value: float = math.nan
    half_width: float = math.nan
    unit: str = ""
    end: datetime | None = None
    reason: str = ""


@dataclass(frozen=True, slots=True)
class Change:
    """What happened to an alert in a pass: one of `EVENTS`, with all that is told of it."""

    alert: Alert
    event: str
    state: State
    shown: Shown
    verdict: Verdict | None


def subject_of(unit: Unit, group: Sequence[Change]) -> str:
    """Say in one line what a notice is about.

    Parameters
    ----------
    unit : Unit
    group : sequence of Change
        The head first.

    Returns
    -------
    str
        `Unit 2 high raised: yield on feed, 8 h below 76.0 % since 14 Apr 2026 09:20 CEST`.
    """
    head, alert = group[0], group[0].alert
    more = f" and {len(group) - 1} more" if len(group) > 1 else ""
    since = wording.local_time(alert.raised, unit.time_zone)
    event = "new verdict" if head.event == "verdict" else head.event
    return f"{unit.name} {alert.priority} {event}: {_crossing(head, unit)} since {since}{more}"


def in_words(unit: Unit, group: Sequence[Change], *, page: str, now: datetime) -> str:
    """Tell a group of alerts that belong together.

    Parameters
    ----------
    unit : Unit
    group : sequence of Change
        The head first.
    page : str
        Address of the page, or empty.
    now : datetime
        With a zone.

    Returns
    -------
    str
        Lines of plain text; times by the plant's clock.
    """
    paragraphs = ["\n".join(_told(change, unit, now)) for change in group]
    check = list(_checks(group[0].verdict))
    first = ["Check first:\n" + "\n".join(check)] if check else []
    return "\n\n".join([*paragraphs, *first, "\n".join(_look(group, unit, page)), wording.CAUTIONS[0]]) + "\n"


def _told(change: Change, unit: Unit, now: datetime) -> Iterator[str]:
    """Tell one alert: what, since when, the value, and why."""
    alert, zone = change.alert, unit.time_zone
    yield f"{unit.name}: {_crossing(change, unit)}"
    yield f"Alert: {alert.id}, {alert.priority}, {_standing(change)}"
    crossed = wording.local_time(alert.first_crossed, zone, now=now)
    yield f"Since: {wording.local_time(alert.raised, zone, now=now)} (first crossed {crossed})"
    if alert.cleared is not None:
        yield f"Until: {wording.local_time(alert.cleared, zone, now=now)}"
    yield f"Now: {_seen(change, zone, now)}"
    yield f"Verdict: {headline(change.verdict) if change.verdict else NO_VERDICT}"


def _crossing(change: Change, unit: Unit) -> str:
    """`yield on feed, 8 h below 76.0 %`; of a test for drift, what it has left."""
    alert = change.alert
    side = "below" if alert.side == "low" else "above"
    tests = [watch.test for watch in unit.watches if watch.name == alert.watch]
    limit = f"{wording.plain(alert.limit)} {change.shown.unit}".strip()
    if tests and tests[0] != "limits":
        places = 2 if not change.shown.half_width > 0 else wording.decimals_for(change.shown.half_width)
        limit = f"the {wording.number(alert.limit, places)} {change.shown.unit}".strip() + " expected of it"
    return f"{alert.figure}, {wording.window(timedelta(hours=alert.window_h))} {side} {limit}"


def _standing(change: Change) -> str:
    """What became of the alert."""
    if change.alert.withdrawn:
        return f"withdrawn: {change.alert.withdrawn}"
    if change.event == "withdrawn":
        return "withdrawn: by what is known now it is suppressed by design, the unit not running steadily"
    if change.event == "verdict":
        return "still active; the verdict is new"
    return change.event if change.alert.active or change.event == "cleared" else "raised, and over by now"


def _seen(change: Change, zone: str, now: datetime) -> str:
    """The figure with its half-width, and until when its window reaches."""
    shown = change.shown
    if not math.isfinite(shown.value):
        return f"not shown ({shown.reason})"
    end = wording.local_time(shown.end, zone, now=now) if shown.end else ""
    window = wording.window(timedelta(hours=change.alert.window_h))
    return f"{wording.amount(shown.value, shown.half_width, shown.unit)} (95 %), {window} to {end}"


def _checks(verdict: Verdict | None) -> Iterator[str]:
    """What to look at, the likeliest suspect first."""
    told = [one for one in verdict.suspects if one.check][:MOST_CHECKS] if verdict else []
    for number, one in enumerate(told, start=1):
        yield f"{number}. {one.name}: {one.check}"


def _look(group: Sequence[Change], unit: Unit, page: str) -> Iterator[str]:
    """Where there is more to see."""
    yield f"Look: outlet alerts show {group[0].alert.id}"
    if page:
        yield f"      {page}{'&' if '?' in page else '?'}unit={quote(unit.key)}"


def together(told: Sequence[tuple[str, str]]) -> str:
    """Put several notices into one.

    Parameters
    ----------
    told : sequence of (str, str)
        Subject and text of each.

    Returns
    -------
    str
        All subjects, then all texts.
    """
    subjects = "\n".join(f"{number}. {subject}" for number, (subject, _) in enumerate(told, start=1))
    start = f"More notices in an hour than this target is to get, so here are {len(told)} in one:\n{subjects}"
    return ("\n\n" + "-" * 40 + "\n\n").join([start, *(text.strip("\n") for _, text in told)]) + "\n"


def trial_words(unit: Unit, now: datetime) -> str:
    """Tell that this is a test.

    Parameters
    ----------
    unit : Unit
    now : datetime
        With a zone.

    Returns
    -------
    str
    """
    at = wording.local_time(now, unit.time_zone)
    return f"A test of notices of {unit.name}, made {at}. Nothing has happened.\n\n{wording.CAUTIONS[0]}\n"
