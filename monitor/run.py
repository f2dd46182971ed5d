"""One pass through everything: exports into readings, each unit's due days, its episodes; one commit."""

from __future__ import annotations

import time
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta
from functools import partial
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from ingest import journal
from ingest.intake import SETTLE, Outcome, take_in
from ingest.ledger import Store
from ingest.parts import month_edges, times_us
from ingest.passes import Pass
from ingest.snapshot import Snapshot
from ingest.unit import Unit
from monitor.catchup import Worked, catch_up
from monitor.days import Plan, plan_of
from monitor.desk import known
from monitor.noticing import changes_of, keep
from monitor.progress import EXPORTS
from monitor.register import registered
from monitor.verdict import COLUMN
from monitor.verdicts import with_verdicts
from monitor.watched import bring_up

Progress = Callable[[str, int, int], None]


@dataclass(frozen=True, slots=True)
class Episode:
    """One episode; `side` is 'low' or 'high', limit and worst in the figure's unit, times UTC.

    `cleared` is None while it is open.
    """

    watch: str
    side: str
    limit: float
    priority: str
    raised: datetime
    cleared: datetime | None
    worst: float


@dataclass(frozen=True, slots=True)
class UnitResult:
    """What a pass did for one unit, and every episode it has."""

    unit: str
    time_zone: str
    months: tuple[str, ...]
    days: int
    cells: int
    solved: int
    episodes: tuple[Episode, ...]
    notes: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True)
class PassResult:
    """What a pass did: each export with its account, each unit, notes, processor time by step [s]."""

    number: int
    exports: tuple[Outcome, ...]
    units: tuple[UnitResult, ...]
    notes: tuple[str, ...]
    processor_s: dict[str, float]

    @property
    def set_aside(self) -> tuple[Outcome, ...]:
        """Give the exports that could not be read."""
        return tuple(one for one in self.exports if one.status == "set aside")


def run_pass(
    units: Sequence[Unit],
    store: Path,
    exports: Sequence[Path],
    *,
    progress: Progress,
    settle: timedelta = SETTLE,
) -> PassResult:
    """Take exports in and bring every unit up to date: all of it becomes visible at once, or nothing does.

    Parameters
    ----------
    units : sequence of Unit
        All units of the store.
    store : Path
        Folder; made if it is not there.
    exports : sequence of Path
        Files or folders.
    progress : callable
        Told what is being worked on, steps done, steps in all; bytes in place of steps for EXPORTS.
    settle : timedelta
        An export changed more recently is left for the next pass.

    Returns
    -------
    PassResult
    """
    plans = [plan_of(unit) for unit in units]
    with Store(store).begin() as pass_:
        clock = [time.process_time()]
        before = pass_.view()
        taken = take_in(pass_, units, exports, settle=settle, progress=lambda *at: progress(EXPORTS, *at))
        clock.append(time.process_time())
        worked = [catch_up(pass_, before, plan, taken.touched[plan.unit.key], progress) for plan in plans]
        clock.append(time.process_time())
        told = tuple(_tell(pass_, before, plan, one) for plan, one in zip(plans, worked, strict=True))
        for plan in plans:
            _register(pass_, store, plan)
        clock.append(time.process_time())
    steps = dict(zip(("exports", "months", "episodes"), np.diff(clock).round(3).tolist(), strict=True))
    notes = (*taken.notes, *(note for one in told for note in one.notes))
    return PassResult(pass_.number, taken.outcomes, told, notes, steps)


def _tell(pass_: Pass, before: Snapshot, plan: Plan, worked: Worked) -> UnitResult:
    """Bring a unit's episodes and their verdicts up to date and tell what became of it."""
    unit = plan.unit
    notes = bring_up(pass_, unit, plan.figures, worked.since_us)
    episodes = pass_.view().episodes(unit.key)
    if len(episodes):
        bare = episodes.drop(columns=COLUMN, errors="ignore")
        episodes = with_verdicts(before, pass_.view(), unit, plan.problem, bare)
        pass_.replace_episodes(unit.key, episodes)
    return UnitResult(
        unit=unit.key,
        time_zone=unit.time_zone,
        months=worked.months,
        days=worked.days,
        cells=worked.cells,
        solved=worked.solved,
        episodes=tuple(_episode(one) for one in episodes.itertuples()),
        notes=notes,
    )


def _register(pass_: Pass, store: Path, plan: Plan) -> None:
    """Bring a unit's alerts up to date with its episodes, and put notices of that into the commit."""
    view, unit, now = pass_.view(), plan.unit, datetime.now(UTC)
    months = view.months(unit.key, "cells")
    if not months:
        return
    starts = times_us(view.read(unit.key, "cells", first=month_edges(months[-1])[0], columns=["start"]))
    newest = datetime.fromtimestamp(0, UTC) + timedelta(microseconds=int(starts[-1])) + unit.cell
    names = [watch.name for watch in unit.watches]
    before, lines = known(store, unit.key), journal.lines(store, unit=unit.key)
    changed = registered(unit.key, before, view.episodes(unit.key), names, newest)
    told = changes_of(view, unit, before, changed, figures=plan.figures, lines=lines, newest=newest, now=now)
    pass_.at_commit(partial(keep, alerts=changed, changes=told, unit=unit, now=now))


def _episode(row: Any) -> Episode:
    cleared = None if pd.isna(row.cleared) else row.cleared.to_pydatetime()
    raised = row.raised.to_pydatetime()
    return Episode(row.watch, row.side, row.limit, row.priority, raised, cleared, row.worst)
