"""How late the analyzers of a unit were on each of its last days, from the readings that are stored."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import asdict, dataclass
from datetime import timedelta
from pathlib import Path
from typing import Any

from ingest.archive import SITE, STAGE
from ingest.errors import StoreError
from ingest.lag import DIFFERS, Lag, lags, stretches
from ingest.ledger import Store
from ingest.parts import month_edges
from ingest.readings import read_months
from ingest.snapshot import Snapshot
from ingest.unit import Unit
from monitor.windows import local_midnights
from monitor.wording import utc

AROUND = timedelta(hours=3)  # readings beside the days that lags and checks of readings may want
_US = timedelta(microseconds=1)


@dataclass(frozen=True, slots=True)
class Analyzer:
    """One analyzer: its lag on each local day, and the stretches of days over which it stayed."""

    name: str
    declared_min: float
    days: tuple[Lag, ...]
    stretches: tuple[Lag, ...]

    @property
    def is_contradicted(self) -> bool:
        """Tell whether the last that was seen of its lag is not what is declared."""
        return bool(self.stretches) and self.stretches[-1].answer == DIFFERS


@dataclass(frozen=True, slots=True)
class Delays:
    """The analyzers of a unit, in its order."""

    unit: str
    name: str
    time_zone: str
    analyzers: tuple[Analyzer, ...]


def delays(folder: Path, unit: Unit, days: int) -> Delays:
    """Estimate how late every analyzer was on each of the last local days with readings.

    Parameters
    ----------
    folder : Path
        The store.
    unit : Unit
        Whose readings are stored there.
    days : int
        How many local days, the one of the last reading included.

    Returns
    -------
    Delays

    Raises
    ------
    StoreError
        There are no readings of the unit.
    """
    return Store(folder).look(lambda view: _delays(folder, view, unit, days))


def _delays(folder: Path, view: Snapshot, unit: Unit, days: int) -> Delays:
    """Estimate them from one view of the store."""
    tags = tuple(one.tag for one in unit.instruments if one.tag is not None)
    first, last = _record(folder, view, unit, tags)
    begin = max(first, last - days * timedelta(days=1) // _US)
    edges = local_midnights(unit.time_zone, begin, last)[-days - 1 :].tolist()
    since, until = edges[0] - AROUND // _US, edges[-1] + AROUND // _US
    readings = read_months(view.paths(SITE, STAGE, first=since, last=until), tags, since, until)
    found = lags(unit, readings, edges)
    count = len(edges) - 1
    each = (found[at : at + count] for at in range(0, len(found), count))
    analyzers = tuple(Analyzer(own[0].analyzer, own[0].declared_min, own, stretches(own)) for own in each)
    return Delays(unit.key, unit.name, unit.time_zone, analyzers)


def as_table(found: Delays) -> dict[str, Any]:
    """Lay the answer out for other programs.

    Parameters
    ----------
    found : Delays

    Returns
    -------
    dict
        Times in ISO 8601, UTC; null for what is not known. The likelihood of each lag is left out.
    """
    analyzers = [
        {
            "analyzer": one.name,
            "declared_min": one.declared_min,
            "days": [_row(day) for day in one.days],
            "stretches": [_row(stretch) for stretch in one.stretches],
        }
        for one in found.analyzers
    ]
    return {"unit": found.unit, "name": found.name, "analyzers": analyzers}


def _row(lag: Lag) -> dict[str, Any]:
    """One span of time as a table row."""
    left_out = ("analyzer", "declared_min", "first_us", "last_us", "searched_min", "gains")
    kept = {key: value for key, value in asdict(lag).items() if key not in left_out}
    known = {
        key: None if isinstance(value, float) and math.isnan(value) else value for key, value in kept.items()
    }
    return {"from": utc(lag.first_us).isoformat(), "to": utc(lag.last_us).isoformat(), **known}


def _record(folder: Path, view: Snapshot, unit: Unit, tags: Sequence[str]) -> tuple[int, int]:
    """First and last time with a reading of the unit [us UTC]."""
    months = view.months(SITE, STAGE)
    first, last = (_ends(view, order, tags) for order in (months, months[::-1]))
    if first is None or last is None:
        raise StoreError(
            f"{folder}: holds no readings of {unit.key}",
            remedy=f"Take exports in: outlet run --unit {unit.key}.toml --store {folder} EXPORT...",
        )
    return first[0], last[1]


def _ends(view: Snapshot, months: Sequence[str], tags: Sequence[str]) -> tuple[int, int] | None:
    """First and last reading of the first month listed that has any."""
    for month in months:
        first, last = month_edges(month)
        held = read_months(view.paths(SITE, STAGE, first=first, last=last), tags, first, last).values()
        if held:
            return min(int(one.time[0]) for one in held), max(int(one.time[-1]) for one in held)
    return None
