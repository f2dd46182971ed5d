"""One alert with all that belongs to it: where it stands, what it says in a sentence, its verdict."""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from datetime import datetime
from typing import Any

import pandas as pd

from ingest.unit import Unit
from monitor import wording
from monitor.alerts import (
    ACKNOWLEDGED,
    NORMAL,
    OUT_OF_SERVICE,
    RETURNED,
    SHELVED,
    SUPPRESSED,
    UNACKNOWLEDGED,
    Alert,
    Group,
    State,
    grouped,
)
from monitor.board import Reading
from monitor.figures import Figure
from monitor.verdict import Verdict, read
from monitor.wording import Told

# The shape of each condition; the word stands beside it.
SHAPES = {
    UNACKNOWLEDGED: "\u25b2",
    ACKNOWLEDGED: "\u25b3",
    RETURNED: "\u25bd",
    SHELVED: "\u25ad",
    SUPPRESSED: "\u25c7",
    OUT_OF_SERVICE: "\u2715",
    NORMAL: "\u25cf",
}
ASKING = (UNACKNOWLEDGED, RETURNED)  # nobody has taken these yet


@dataclass(frozen=True, slots=True)
class Dossier:
    """An alert, where it stands, its sentence, its verdict, and the figure now where it can be told."""

    alert: Alert
    state: State
    said: str
    verdict: Verdict | None
    reading: Reading | None

    @property
    def shape(self) -> str:
        """Give the shape of its condition."""
        return SHAPES[self.state.condition]

    @property
    def asks(self) -> bool:
        """Tell whether it asks for somebody who has not answered yet."""
        return self.state.condition in ASKING


@dataclass(frozen=True, slots=True)
class Present:
    """What alerts are held against: figures and newest readings by watch, and the end of what is known."""

    figures: Mapping[str, Figure]
    readings: Mapping[str, Reading | None]
    end: datetime


def verdicts(found: Sequence[tuple[Alert, State]], episodes: pd.DataFrame) -> dict[str, Verdict]:
    """Give the verdict of each alert that has one.

    Parameters
    ----------
    found : sequence of (Alert, State)
        As `desk.read` gives them.
    episodes : DataFrame
        Of the unit, as stored; not changed.

    Returns
    -------
    dict
        Id of the alert -> verdict of its episode.
    """
    rows = _by_raise(episodes)
    told = {alert.id: read(rows.get(_raise_of(alert), {})) for alert, _ in found}
    return {name: verdict for name, verdict in told.items() if verdict is not None}


def _by_raise(episodes: pd.DataFrame) -> dict[tuple[Any, ...], dict[str, Any]]:
    records: list[Any] = episodes.to_dict("records")
    return {(row["watch"], row["side"], row["raised"]): row for row in records}


def _raise_of(alert: Alert) -> tuple[Any, ...]:
    return alert.watch, alert.side, pd.Timestamp(alert.raised)


def dossiers(
    unit: Unit, found: Sequence[tuple[Alert, State]], episodes: pd.DataFrame, present: Present
) -> tuple[Dossier, ...]:
    """Put each alert together with its episode's verdict and its sentence.

    Parameters
    ----------
    unit : Unit
        Its watches.
    found : sequence of (Alert, State)
        As `desk.read` gives them.
    episodes : DataFrame
        Of the unit, as stored; not changed.
    present : Present
        What they are held against.

    Returns
    -------
    tuple of Dossier
        In the same order.
    """
    rows = _by_raise(episodes)
    drifts = {watch.name for watch in unit.watches if watch.test != "limits"}
    made = []
    for alert, state in found:
        row = rows.get(_raise_of(alert), {})
        reading = present.readings.get(alert.watch)
        told = _told(alert, row, present.figures.get(alert.figure), drift=alert.watch in drifts)
        said = wording.episode(
            told,
            value=reading.value if reading else math.nan,
            half_width=reading.half_width if reading else math.nan,
            now=present.end,
            zone=unit.time_zone,
        )
        made.append(Dossier(alert, state, said, read(row), reading))
    return tuple(made)


def _told(alert: Alert, row: Mapping[str, Any], figure: Figure | None, *, drift: bool) -> Told:
    """What the sentence needs; an alert without an episode any more has no worst value."""
    worst_at = row.get("worst_at")
    return Told(
        figure=figure.label if figure else alert.figure,
        unit=figure.unit if figure else "",
        side=alert.side,
        limit=alert.limit,
        raised=alert.raised,
        cleared=alert.raised if alert.withdrawn and alert.cleared is None else alert.cleared,
        worst=float(row.get("worst", math.nan)),
        worst_at=None if worst_at is None or pd.isna(worst_at) else worst_at.to_pydatetime(),
        drift=drift,
    )


def shown(found: Sequence[Dossier], *, every: bool, since: datetime) -> tuple[tuple[Dossier, ...], ...]:
    """Choose the alerts to show and put those of one cause together.

    Parameters
    ----------
    found : sequence of Dossier
        Of one unit.
    every : bool
        Whether those that are back to normal are shown too.
    since : datetime
        Of these only those that were raised later.

    Returns
    -------
    tuple of tuple of Dossier
        Groups, worst first; the first of each stands for all.
    """
    by_id = {one.alert.id: one for one in found}
    wanted = [
        (one.alert, one.state) for one in found if one.state.open or (every and one.alert.raised >= since)
    ]
    return tuple(tuple(by_id[alert.id] for alert, _ in _members(group)) for group in grouped(wanted))


def _members(group: Group) -> Iterator[tuple[Alert, State]]:
    yield group.head
    yield from group.others
