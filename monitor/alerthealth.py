"""How well the alerts serve: how many, how many for nothing, over thirty days.

Words and 24 h for stale: ANSI/ISA-18.2 and IEC 62682 (see tests). The times that make an alert chattering or
fleeting are in seconds and minutes there, for alarms of a control system; here figures have windows of hours,
so they are counted by the window of the watch: common practice, no source.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from datetime import datetime, timedelta

from monitor.alerts import SHELVE, Alert, State

PERIOD = timedelta(days=30)
STALE = timedelta(hours=24)
CHATTERING = 3  # alerts of one watch within its window and a day
DAY = timedelta(days=1)


@dataclass(frozen=True, slots=True)
class Health:
    """Alerts raised in a period, and how many of them were what they should not be.

    `false_share` is the share of the closed ones that were closed as false; None where none was closed.
    """

    first: datetime
    last: datetime
    raised: int
    per_day: float
    chattering: int
    fleeting: int
    stale: int
    shelved: int
    closed: int
    false_share: float | None


def health(found: Sequence[tuple[Alert, State]], now: datetime) -> Health:
    """Count the alerts of the last thirty days.

    Parameters
    ----------
    found : sequence of (Alert, State)
        Of one unit.
    now : datetime
        End of the period, with a zone.

    Returns
    -------
    Health
        Suppressed and withdrawn alerts asked for nobody and are not counted. Fleeting: over within the
        window of its watch. Stale: it stood for more than 24 h. Chattering: one of three or more of one watch
        within its window and a day.
    """
    first = now - PERIOD
    told = [
        (alert, state)
        for alert, state in found
        if first <= alert.raised <= now and not alert.suppressed and not alert.withdrawn
    ]
    alerts = [alert for alert, _ in told]
    closed = [state for _, state in told if state.closed_as]
    lengths = [((one.cleared or now) - one.raised, one) for one in alerts]
    return Health(
        first=first,
        last=now,
        raised=len(alerts),
        per_day=len(alerts) / (PERIOD / DAY),
        chattering=sum(_chatters(one, alerts) for one in alerts),
        fleeting=sum(one.cleared is not None and length < _window(one) for length, one in lengths),
        stale=sum(length > STALE for length, _ in lengths),
        shelved=sum(any(line.act == SHELVE for line in state.lines) for _, state in told),
        closed=len(closed),
        false_share=sum(s.closed_as == "false" for s in closed) / len(closed) if closed else None,
    )


def _window(alert: Alert) -> timedelta:
    return timedelta(hours=alert.window_h)


def _chatters(alert: Alert, alerts: Sequence[Alert]) -> bool:
    """Whether it is one of three or more of its watch and side that began within its window and a day."""
    span = _window(alert) + DAY
    times = sorted(one.raised for one in alerts if (one.watch, one.side) == (alert.watch, alert.side))
    sets = zip(times, times[CHATTERING - 1 :], strict=False)
    return any(first <= alert.raised <= last and last - first <= span for first, last in sets)
