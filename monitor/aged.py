"""How the figures of a unit age, from its store: rates, and when each limit will be reached.

A figure is looked at as it would be at the usual operating point of its drift watch's expectation.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import asdict, dataclass, replace
from datetime import date, timedelta
from pathlib import Path
from typing import Any

import numpy as np

from ingest.errors import StoreError
from ingest.ledger import Store
from ingest.parts import month_edges
from ingest.snapshot import Snapshot
from ingest.unit import Unit, Watch
from monitor.ageing import LEAST_D, Ageing, Days, Reach, ageing, days_of, reached, stretches
from monitor.departure import steady
from monitor.drift import MICROSECOND
from monitor.drifting import blocks_of, in_force
from monitor.expectation import Expectation, at_usual_point, logarithm_pct

HOUR = timedelta(hours=1)
EPOCH = date(1970, 1, 1)


@dataclass(frozen=True, slots=True)
class Limit:
    """A limit of the unit file that ageing may reach, and by when; value in the figure's unit."""

    value: float
    side: str
    reach: tuple[Reach, ...]


@dataclass(frozen=True, slots=True)
class Aged:
    """How one figure aged since the last event that breaks ageing; `why` tells where nothing can be said."""

    figure: str
    watch: str
    first: date | None
    last: date | None
    rates: Ageing | None
    limits: tuple[Limit, ...]
    why: str


def aged(folder: Path, unit: Unit) -> tuple[Aged, ...]:
    """Tell how the figures of a unit's drift watches age.

    Parameters
    ----------
    folder : Path
        The store.
    unit : Unit
        Gives drift watches, limits and events.

    Returns
    -------
    tuple of Aged
        One for each figure with a drift watch.

    Raises
    ------
    StoreError
        The store holds nothing of the unit.
    """
    view = Store(folder).snapshot()
    if not view.months(unit.key, "cells"):
        raise StoreError(
            f"{folder}: holds no cells of {unit.key}",
            remedy=f"Take exports in: outlet run --unit {unit.key}.toml --store {folder} EXPORT...",
        )
    watches = {one.figure: one for one in reversed(unit.watches) if one.test != "limits"}
    return tuple(_aged(folder, view, unit, watch) for watch in reversed(watches.values()))


def as_table(found: tuple[Aged, ...]) -> dict[str, Any]:
    """Give the same for programs.

    Parameters
    ----------
    found : tuple of Aged
        Of one unit.

    Returns
    -------
    dict
        Plain values; rates in percent of the figure, reach in days after `last`.
    """
    return {"figures": [asdict(one) for one in found]}


def _aged(folder: Path, view: Snapshot, unit: Unit, watch: Watch) -> Aged:
    """Look at one figure."""
    one = in_force(folder, unit.key, watch.name)
    if one is None:
        return Aged(watch.figure, watch.name, None, None, None, (), "no expectation has been learnt yet")
    changed = [event.at for event in unit.events if event.kind == "catalyst change"]
    if any(at.timestamp() * 1e6 >= one.last_us for at in changed):
        why = "the catalyst was changed since the healthy period: write a newer one"
        return Aged(watch.figure, watch.name, None, None, None, (), why)
    days = _days(view, unit, watch, one)
    if not len(days.day):
        return Aged(watch.figure, watch.name, None, None, None, (), "no day of steady running")
    rates = ageing(days)
    why = "" if rates else f"too few days since the last event that changed its level; {LEAST_D} are needed"
    first, last = (EPOCH + timedelta(days=int(day)) for day in days.day[[0, -1]])
    return Aged(watch.figure, watch.name, first, last, rates, tuple(_limits(unit, watch, days)), why)


def _days(view: Snapshot, unit: Unit, watch: Watch, one: Expectation) -> Days:
    """Give the days since the last event that breaks ageing."""
    months = view.months(unit.key, "cells")
    first, last = month_edges(months[0])[0], month_edges(months[-1])[1]
    blocks = blocks_of(view, unit, watch, first, last)
    make = blocks_of(view, unit, replace(watch, figure=f"make of {unit.wanted}", steady=False), first, last)
    stretch = stretches(blocks.end_us, unit.events)
    now = stretch == stretch.max(initial=0)
    value = at_usual_point(one, blocks.point, logarithm_pct(blocks.value))
    value = np.where(steady(blocks, watch.window // MICROSECOND), value, np.nan)
    return days_of(blocks.end_us[now], value[now], make.value[now] * (watch.window / HOUR))


def _limits(unit: Unit, watch: Watch, days: Days) -> Iterator[Limit]:
    """Say when the limits of a figure will be reached."""
    for other in (one for one in unit.watches if one.figure == watch.figure):
        for side, value in (("low", other.low), ("high", other.high)):
            if value is not None and value > 0:
                limit_pct = float(logarithm_pct(np.array([value]))[0])
                yield Limit(value, side, reached(days, limit_pct, bad=side))
