"""What the commands print about alerts: conditions, journal and health become lines of text."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import asdict
from datetime import datetime, timedelta
from itertools import pairwise
from typing import Any

from ingest.journal import Line
from ingest.unit import Unit
from monitor import wording
from monitor.alerthealth import PERIOD, Health
from monitor.alerts import CLOSE, SHELVED, Alert, Group, State

ACTS = {
    "acknowledge": "taken",
    "shelve": "shelved",
    "unshelve": "unshelved",
    "note": "noted",
    "close": "closed",
    "out of service": "watch out of service",
    "back in service": "watch back in service",
}


def listed(groups: Sequence[Group], unit: Unit) -> Iterator[str]:
    """Tell the alerts of a unit, worst first; those of one cause under the first of them.

    Parameters
    ----------
    groups : sequence of Group
        From `alerts.grouped`.
    unit : Unit
        Gives watches and time zone.

    Yields
    ------
    str
        One line for each alert.
    """
    if not groups:
        yield "no alert is open"
    for group in groups:
        yield headline(*group.head, unit)
        yield from (f"  with it: {headline(*one, unit)}" for one in group.others)


def headline(alert: Alert, state: State, unit: Unit) -> str:
    """Tell one alert in one line.

    Parameters
    ----------
    alert : Alert
    state : State
        Where it stands.
    unit : Unit
        Gives watches and time zone.

    Returns
    -------
    str
        `line3-17 high  yield on feed, 8 h below 76.0 since 2026-03-29 06:00, unacknowledged; reactor`.
    """
    zone = unit.time_zone
    since = wording.local_time(alert.raised, zone)
    span = f"since {since}" if alert.active else f"{since} to {_end(alert, zone)}"
    said = f"; {alert.cause}" if alert.cause else ""
    names = f" ({', '.join(alert.suspects)})" if alert.suspects else ""
    return (
        f"{alert.id} {alert.priority}  {_crossing(alert, unit)} {span}, {standing(state, zone)}{said}{names}"
    )


def _end(alert: Alert, zone: str) -> str:
    """When it was over, if it ever was what it was told to be."""
    if alert.withdrawn or alert.cleared is None:
        return "withdrawn"
    return wording.local_time(alert.cleared, zone)


def _crossing(alert: Alert, unit: Unit) -> str:
    """Which limit is crossed; that of a test for drift is what was expected."""
    side = "below" if alert.side == "low" else "above"
    drifts = any(one.name == alert.watch and one.test != "limits" for one in unit.watches)
    limit = f"the {wording.number(alert.limit, 2)} expected" if drifts else wording.plain(alert.limit)
    return f"{alert.figure}, {wording.window(timedelta(hours=alert.window_h))} {side} {limit}"


def standing(state: State, zone: str) -> str:
    """Say where an alert stands, by whom and until when.

    Parameters
    ----------
    state : State
    zone : str
        The plant's time zone.

    Returns
    -------
    str
        `shelved by A. Moor until 14:00`.
    """
    by = f" by {state.who}" if state.who else ""
    until = f" until {wording.local_time(state.until, zone)}" if state.until else ""
    closed = f", closed as {state.closed_as}" if state.closed_as else ""
    return f"{state.condition}{by}{until if state.condition == SHELVED else ''}{closed}"


def told(alert: Alert, state: State, history: Sequence[tuple[datetime, Alert]], unit: Unit) -> Iterator[str]:
    """Tell all about one alert: how it stands, what late data changed, and its lines of the journal.

    Parameters
    ----------
    alert : Alert
    state : State
        Where it stands.
    history : sequence of (datetime, Alert)
        From `desk.history`.
    unit : Unit
        Gives watches and time zone.

    Yields
    ------
    str
        One line.
    """
    zone = unit.time_zone
    yield headline(alert, state, unit)
    yield f"  limit first crossed {wording.local_time(alert.first_crossed, zone)}"
    if alert.withdrawn:
        yield f"  withdrawn: {alert.withdrawn}"
    if alert.past:
        yield "  was over when it was first seen, in data that came late"
    for when, changes in revised(history, zone):
        yield f"  {wording.local_time(when, zone)}  revised: {changes}"
    yield from (f"  {_line(line, zone)}" for line in state.lines)


def revised(history: Sequence[tuple[datetime, Alert]], zone: str) -> Iterator[tuple[datetime, str]]:
    """Tell what each pass changed in an alert.

    Parameters
    ----------
    history : sequence of (datetime, Alert)
        From `desk.history`.
    zone : str
        The plant's time zone.

    Yields
    ------
    tuple of (datetime, str)
        When, and what from what to what.
    """
    for (_, before), (when, after) in pairwise(history):
        yield when, ", ".join(_changes(before, after, zone))


def _changes(before: Alert, after: Alert, zone: str) -> Iterator[str]:
    """What a pass changed in an alert."""
    one, two = before.body(), after.body()
    for name in (name for name in one if one[name] != two[name]):
        old, new = (_shown(getattr(alert, name), zone) for alert in (before, after))
        yield f"{name.replace('_', ' ')} {old} -> {new}"


def _shown(value: Any, zone: str) -> str:
    if isinstance(value, datetime):
        return wording.local_time(value, zone)
    if isinstance(value, tuple):
        return ", ".join(value) or "none"
    return {None: "not yet", True: "yes", False: "no", "": "none"}.get(value, str(value))


def _line(line: Line, zone: str) -> str:
    """One line of the journal."""
    when = wording.local_time(datetime.fromisoformat(line.written), zone)
    note = f": {line.note}" if line.note else ""
    return f"{when}  {act_words(line)}{note}"


def act_words(line: Line) -> str:
    """Say what a line of the journal is about, and whose it is.

    Parameters
    ----------
    line : Line
        About an alert.

    Returns
    -------
    str
        `closed as instrument by A. Moor`.
    """
    extra = f" as {line.detail['cause']}" if line.act == CLOSE else ""
    return f"{ACTS.get(line.act, line.act)}{extra} by {line.who}"


def wrote(line: Line) -> Iterator[str]:
    """Tell that a line was written.

    Parameters
    ----------
    line : Line
        Of the journal.

    Yields
    ------
    str
        One line.
    """
    until = f" until {line.detail['until']}" if "until" in line.detail else ""
    yield f"{line.subject}: {ACTS.get(line.act, line.act)} by {line.who}{until}"


def healthy(found: Health) -> Iterator[str]:
    """Tell how well the alerts serve.

    Parameters
    ----------
    found : Health
        Of one unit.

    Yields
    ------
    str
        One line.
    """
    share = "" if found.false_share is None else f" ({100 * found.false_share:.0f} % of them false)"
    yield (
        f"last {PERIOD.days} days of the record: {found.raised} raised ({found.per_day:.2f} a day),"
        f" {found.chattering} chattering, {found.fleeting} fleeting, {found.stale} longer than a day,"
        f" {found.shelved} shelved, {found.closed} closed{share}"
    )


def as_table(alert: Alert, state: State) -> dict[str, Any]:
    """Give one alert and its state for programs.

    Parameters
    ----------
    alert : Alert
    state : State
        Where it stands.

    Returns
    -------
    dict
        What JSON knows but for times, which become text.
    """
    lines = [asdict(line) for line in state.lines]
    return {**alert.body(), "condition": state.condition, "by": state.who, "until": state.until,
            "closed_as": state.closed_as, "journal": lines}  # fmt: skip
