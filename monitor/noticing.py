"""What a pass has to tell of its alerts: change, newest figure and verdict, as notices of its commit."""

from __future__ import annotations

import sqlite3
from collections.abc import Iterable, Sequence
from dataclasses import asdict
from datetime import datetime, timedelta
from typing import Any

import pandas as pd

from ingest import outbox
from ingest.journal import Line
from ingest.snapshot import Snapshot
from ingest.unit import Unit, Watch
from monitor import desk
from monitor.alerts import Alert, fold
from monitor.board import mode_of
from monitor.figures import Figure
from monitor.layout import BAR, figure_stage
from monitor.notices import event_of, letters
from monitor.noticetext import Change, Shown
from monitor.verdict import Verdict, read
from monitor.windows import REASONS
from monitor.wording import MISSING

FIELDS = ("value", "half_width", "reason")


def changes_of(
    view: Snapshot,
    unit: Unit,
    known: Iterable[Alert],
    changed: Iterable[Alert],
    *,
    figures: Sequence[Figure],
    lines: Sequence[Line],
    newest: datetime,
    now: datetime,
) -> tuple[Change, ...]:
    """Gather what people have to be told of the alerts that a pass changed.

    Parameters
    ----------
    view : Snapshot
        The store as the pass leaves it.
    unit : Unit
    known, changed : iterable of Alert
        Before the pass, and what it changed.
    figures : sequence of Figure
        All figures of the unit.
    lines : sequence of Line
        The unit's journal.
    newest : datetime
        End of the newest window, UTC.
    now : datetime
        With a zone; the clock of the pass.

    Returns
    -------
    tuple of Change
        Without those that nobody is told of; none where the unit has no targets.
    """
    before = {alert.id: alert for alert in known}
    events = ((one, event_of(before.get(one.id), one)) for one in changed if unit.targets)
    told = [(one, event) for one, event in events if event]
    rows = view.episodes(unit.key).to_dict("records") if told else []
    units = {figure.name: figure.unit for figure in figures}
    return tuple(
        Change(
            alert=alert,
            event=event,
            state=fold(alert, lines, now),
            shown=_shown(view, unit, alert, units.get(alert.figure, ""), newest),
            verdict=_verdict(alert, rows),
        )
        for alert, event in told
    )


def _verdict(alert: Alert, rows: Sequence[dict[Any, Any]]) -> Verdict | None:
    """The verdict of the episode that an alert stands for, where there is one."""
    own = (alert.watch, alert.side, alert.first_crossed)
    found = (read(row) for row in rows if (row["watch"], row["side"], row["first_crossed"]) == own)
    return next((one for one in found if one is not None), None)


def _shown(view: Snapshot, unit: Unit, alert: Alert, symbol: str, newest: datetime) -> Shown:
    """The figure in the window that ends with the newest cell."""
    watch = next((one for one in unit.watches if one.name == alert.watch), None)
    if watch is None:
        return Shown(unit=symbol, reason="its watch is gone")
    row = _row(view, unit, watch, newest)
    if row is None:
        return Shown(unit=symbol, reason="no figure yet")
    value, half_width, reason = row
    return Shown(value, half_width, symbol, newest, MISSING.get(reason, (reason, ""))[0])


def _row(view: Snapshot, unit: Unit, watch: Watch, end: datetime) -> tuple[float, float, str] | None:
    """Value, half-width and reason of what a watch looks at in the window of one end."""
    columns = [BAR.join((watch.figure, mode_of(watch), field)) for field in FIELDS]
    stage, last = figure_stage(watch.window), end + timedelta(microseconds=1)
    frame: pd.DataFrame = view.read(
        unit.key, stage, first=end, last=last, columns=["end", *columns]
    ).to_pandas()
    if frame.empty:
        return None
    value, half_width, reason = frame.iloc[-1][columns]
    return float(value), float(half_width), REASONS[int(reason)]


def keep(
    ledger: sqlite3.Connection,
    alerts: Sequence[Alert],
    changes: Sequence[Change],
    unit: Unit,
    now: datetime,
) -> None:
    """Keep changed alerts and put their notices into the outbox, as one step of the commit of a pass.

    Parameters
    ----------
    ledger : sqlite3.Connection
        In the transaction of the commit.
    alerts : sequence of Alert
        New and changed ones.
    changes : sequence of Change
        From `changes_of`.
    unit : Unit
        With its targets.
    now : datetime
        With a zone; the clock of the pass.
    """
    revisions = {one.key: one.revision for one in desk.put(ledger, alerts)}
    for letter in letters(unit, changes, revisions, now):
        outbox.put(ledger, **asdict(letter))
