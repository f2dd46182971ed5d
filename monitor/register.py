"""The register of alerts: an episode of this pass is the alert that people were told of at an earlier one.

Episodes are worked out anew at every pass. An alert keeps its id whatever late data do to its episode: it is
revised, and where there is no such episode any more it is withdrawn, with the reason. It never vanishes.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import replace
from datetime import UTC, datetime, timedelta
from typing import Any

import pandas as pd

from monitor.alerts import Alert
from monitor.verdict import read

OLD = timedelta(hours=24)  # what was over for so long when it was first seen is past: nobody had to act
GONE_WATCH = "the unit file no longer has this watch"
GONE_DATA = "late or corrected data left no such episode"
_FAR = datetime.max.replace(tzinfo=UTC)


def registered(
    unit: str, known: Sequence[Alert], episodes: pd.DataFrame, watches: Iterable[str], newest: datetime
) -> tuple[Alert, ...]:
    """Match the episodes of a pass with the alerts known so far.

    Parameters
    ----------
    unit : str
        Key of the unit.
    known : sequence of Alert
        Every alert that the unit ever had.
    episodes : DataFrame
        As `drift.unit_episodes` gives it, with a column `verdict` where there are verdicts; not changed.
    watches : iterable of str
        Names of the watches that the unit has now.
    newest : datetime
        End of the last window: the present, as far as the data tell.

    Returns
    -------
    tuple of Alert
        New and changed ones only, by number; the same episodes again give none.
    """
    free = {alert.id: alert for alert in known}
    number = max((alert.number for alert in known), default=0)
    found: list[Alert] = []
    for row in episodes.to_dict("records"):
        fresh = _alert(unit, row, newest)
        match = _match(fresh, free.values())
        if match is None:
            number += 1
            found.append(replace(fresh, id=f"{unit}-{number}"))
        else:
            del free[match.id]
            found.append(replace(fresh, id=match.id, past=match.past and fresh.past))
    named = set(watches)
    found += [
        replace(alert, withdrawn=GONE_DATA if alert.watch in named else GONE_WATCH) for alert in free.values()
    ]
    before = {alert.id: alert for alert in known}
    return tuple(sorted((one for one in found if before.get(one.id) != one), key=lambda one: one.number))


def _alert(unit: str, row: dict[Any, Any], newest: datetime) -> Alert:
    """An episode as an alert without an id."""
    cleared = None if pd.isna(row["cleared"]) else row["cleared"].to_pydatetime()
    verdict = read(row)
    stands = verdict is not None and not verdict.is_provisional
    return Alert(
        id="",
        unit=unit,
        watch=row["watch"],
        figure=row["figure"],
        window_h=row["window"] / timedelta(hours=1),
        side=row["side"],
        limit=float(row["limit"]),
        priority=row["priority"],
        first_crossed=row["first_crossed"].to_pydatetime(),
        raised=row["raised"].to_pydatetime(),
        cleared=cleared,
        suppressed=bool(row["suppressed"]),
        past=cleared is not None and cleared < newest - OLD,
        cause=verdict.word if verdict is not None and stands else "",
        suspects=tuple(one.name for one in verdict.suspects) if verdict is not None and stands else (),
    )


def _match(fresh: Alert, free: Iterable[Alert]) -> Alert | None:
    """The known alert of the same watch and side whose episode shares most time with this one."""
    same = [one for one in free if (one.watch, one.side) == (fresh.watch, fresh.side)]
    shared = [(one, _shared(one, fresh)) for one in same]
    near = [(one, length) for one, length in shared if length >= timedelta(0)]
    return max(near, key=lambda pair: (pair[1], -pair[0].number))[0] if near else None


def _shared(one: Alert, two: Alert) -> timedelta:
    """How long two episodes overlap; negative where they do not touch."""
    begin = max(one.first_crossed, two.first_crossed)
    return min(one.cleared or _FAR, two.cleared or _FAR) - begin
