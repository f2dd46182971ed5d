"""Which days of a unit a pass has to work out again, and working them out into the open pass.

A cell is made again when readings came in that reach it, when the record grew into it, or when the operating
condition before it changed. A day is worked out again when one of its cells came out otherwise, and with it
the figures of all windows that hold cells of it; all days are when the unit file changed since.
"""

from __future__ import annotations

import hashlib
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass, fields, replace
from datetime import timedelta
from functools import lru_cache
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

from ingest.archive import SITE, STAGE, Span
from ingest.cells import (
    DOWN,
    NOT_KNOWN,
    STARTING,
    Carried,
    Cells,
    carried_after,
    cells_frame,
    cells_from_frame,
    look_back,
    make_cells,
    reach,
)
from ingest.parts import month_edges, month_of, times_us
from ingest.passes import Pass
from ingest.readings import Readings, in_span, month_tags, read_month
from ingest.reconcile import STATUS
from ingest.snapshot import Snapshot
from monitor.days import DAY_US, Day, Plan, changed_days, rows
from monitor.layout import states_table, table_of
from monitor.months import days_before, figure_tables, runs_of, worked_out

METHOD = "3"  # to be raised when the same readings and unit file give other numbers: all days become due
PLAN_STAGE, PLAN_MONTH = "plan", "1970-01"  # one row that tells what the stored months were worked out with
DERIVED = ("cells", "states", "figures-")
# What a unit file says that no stored number depends on: a change of it makes nothing due.
BESIDE: dict[str, Any] = {
    "name": "", "watches": (), "healthy": None, "events": (), "budget": (), "guarantee": (), "prices": None
}  # fmt: skip
SOLVED = STATUS.index("solved")
_US = timedelta(microseconds=1)
Progress = Callable[[str, int, int], None]
Read = Callable[[Path], Readings]


@dataclass(frozen=True, slots=True)
class Worked:
    """What was worked out of one unit: months written, days, their cells, how many the balance solved.

    `since_us` is from when on cells have changed, None if none did.
    """

    months: tuple[str, ...] = ()
    days: int = 0
    cells: int = 0
    solved: int = 0
    since_us: int | None = None

    def and_then(self, later: Worked) -> Worked:
        """Give what was worked out with what followed.

        Parameters
        ----------
        later : Worked
            In later months.

        Returns
        -------
        Worked
        """
        return Worked(
            self.months + later.months,
            self.days + later.days,
            self.cells + later.cells,
            self.solved + later.solved,
            later.since_us if self.since_us is None else self.since_us,
        )


@dataclass(frozen=True, slots=True)
class _Desk:
    """What one month hands on to the next of the same pass: days worked out, and which of them changed."""

    days: Mapping[int, Day]
    changed: tuple[int, ...]


@dataclass(frozen=True, slots=True)
class _Job:
    """What all months of one unit share in one pass."""

    pass_: Pass
    before: Snapshot
    plan: Plan
    record: _Record
    spans: Sequence[Span]  # in which cells may come out otherwise
    read: Read


def catch_up(
    pass_: Pass, before: Snapshot, plan: Plan, touched: Sequence[Span], progress: Progress
) -> Worked:
    """Work out every month of a unit that is due and write it into the pass.

    Parameters
    ----------
    pass_ : Pass
        Open, with all new readings written.
    before : Snapshot
        The store as the last pass left it.
    plan : Plan
        Of the unit.
    touched : sequence of tuple of int
        Spans first <= t < last in which readings of the unit came in or changed [us UTC], ascending.
    progress : callable
        Told the unit, months done and months due.

    Returns
    -------
    Worked
    """
    unit = plan.unit.key
    known = before.months(unit, "cells")
    anew = not known or _mark(plan) != _mark_of(before, unit)
    if not (anew or touched):
        return Worked()
    # A month needs some minutes of its neighbours: in the order of time each file is then read once.
    read: Read = lru_cache(maxsize=2)(lambda path: read_month(path, _tags(plan)))
    record = _record(plan, pass_.view(), () if anew else known, touched, read)
    if anew:
        _forget(pass_, unit)
        start = pa.array([0], pa.timestamp("us", "UTC"))
        pass_.write(unit, PLAN_STAGE, PLAN_MONTH, pa.table({"start": start, "plan": [_mark(plan)]}))
    if record is None:
        return Worked()
    spans = _reached(plan, record, before, touched, anew=anew)
    job = _Job(pass_, before, plan, record, spans, read)
    due = [m for m in record.months if any(_meet(span, month_edges(m)) for span in spans)]
    worked, desk = Worked(), _Desk({}, ())
    done = 0
    while due:
        month = due.pop(0)
        progress(unit, done, done + 1 + len(due))
        desk, made = _work(job, month, desk)
        done += 1
        worked = worked.and_then(made)
        following = next((later for later in record.months if later > month), None)
        if following and following not in due and _goes_on(job, desk, following):
            due.insert(0, following)
    progress(unit, done, done)
    return worked


@dataclass(frozen=True, slots=True)
class _Record:
    """The time that readings cover: first cell start and end of the cells [us UTC], months with readings."""

    first_us: int
    last_us: int
    read: tuple[str, ...]

    @property
    def months(self) -> tuple[str, ...]:
        """Give the months with work: the last window of a month stands in the next one, read or not."""
        ended = {month_of(month_edges(one)[1]) for one in self.read if month_edges(one)[1] <= self.last_us}
        return tuple(sorted({*self.read, *ended}))

    def edges(self, month: str) -> tuple[int, int, int]:
        """Give first cell start, end of the cells and end of a month [us UTC]."""
        first, after = month_edges(month)
        first = max(first, self.first_us)
        return first, max(first, min(after, self.last_us)) if month in self.read else first, after


def _record(
    plan: Plan, view: Snapshot, known: Sequence[str], touched: Sequence[Span], read: Read
) -> _Record | None:
    """Tell what time the readings of a unit cover, given months that are known to have some.

    A mean stamped at its end covers the interval before its stamp.
    """
    tags = set(_tags(plan))
    new = {month for first, last in touched for month in _months_of(first, last)}
    inner = {*known, *new} if known else set()

    def file_of(month: str) -> Path:
        edges = month_edges(month)
        return view.paths(SITE, STAGE, first=edges[0], last=edges[1])[0]

    def holds(month: str) -> bool:
        inside = bool(known) and known[0] <= month <= known[-1]
        return month in inner if inside else not tags.isdisjoint(month_tags(file_of(month)))

    months = [month for month in view.months(SITE, STAGE) if holds(month)]
    if not months:
        return None
    before = {one.tag: one.cycle // _US for one in plan.unit.instruments if one.sampling == "mean at end"}
    begun = read(file_of(months[0]))
    first = min(int(series.time[0]) - before.get(tag, 0) for tag, series in begun.items())
    last = max(int(series.time[-1]) for series in read(file_of(months[-1])).values())
    return _Record(first // plan.cell_us * plan.cell_us, last, tuple(months))


def _months_of(first: int, last: int) -> Iterator[str]:
    """List the months that share an instant with first <= t < last."""
    month = month_of(first)
    while month_edges(month)[0] < last:
        yield month
        month = month_of(month_edges(month)[1])


def _reached(
    plan: Plan, record: _Record, before: Snapshot, touched: Sequence[Span], *, anew: bool
) -> list[Span]:
    """Give the spans in which cells may come out otherwise than they are stored."""
    if anew:
        return [(record.first_us, max(record.last_us, month_edges(record.months[-1])[0]) + 1)]
    ahead, behind = reach(plan.unit) // _US, look_back(plan.unit) // _US
    spans = [(first - ahead, last + behind) for first, last in touched]
    known = before.months(plan.unit.key, "cells")
    first, last = (_starts(before, plan.unit.key, month) for month in (known[0], known[-1]))
    # Where the record grew at either end there are cells that were not there before.
    spans += [(record.first_us, int(first[0])), (int(last[-1]) + plan.cell_us, record.last_us)]
    spans += [month_edges(month) for month in record.read if month not in known]
    return [(low, high) for low, high in spans if low < high]


def _meet(one: Span, other: Span) -> bool:
    return one[0] < other[1] and other[0] < one[1]


def _starts(view: Snapshot, unit: str, month: str) -> NDArray[np.int64]:
    """Read the cell starts of a month [us UTC]."""
    first, last = month_edges(month)
    return times_us(view.read(unit, "cells", first=first, last=last, columns=["start"]))


def _tags(plan: Plan) -> list[str]:
    """List the tags of a unit."""
    return [one.tag for one in plan.unit.instruments if one.tag is not None]


def _work(job: _Job, month: str, desk: _Desk) -> tuple[_Desk, Worked]:
    """Work out what changed in a month and write it."""
    plan, unit = job.plan, job.plan.unit.key
    cells, changed = _renewed(job, month)
    first, after = (edge // DAY_US for edge in month_edges(month))
    again = [day for one in (*desk.changed, *changed) for day in range(one, one + plan.days_after + 1)]
    runs = runs_of(day for day in again if first <= day < after)
    wanted = {day for run in runs for day in _between(days_before(plan, run))}
    days = worked_out(plan, cells, wanted, _earlier(job, desk, [day for day in wanted if day < first]))
    if changed:
        job.pass_.write(unit, "cells", month, table_of(cells_frame(plan.unit, cells)))
    for run in runs_of(changed):
        _put(job, "states", states_table(plan.problem, [days[day].states for day in _between(run)]), run)
    for run in runs:
        for stage, table in figure_tables(plan, days, run).items():
            _put(job, stage, table, run)
    kept = days_before(plan, (after, after))[0] - 1
    handed = _Desk(
        {day: one for day, one in days.items() if day >= kept},
        tuple(day for day in (*desk.changed, *changed) if day + plan.days_after >= after),
    )
    status = [days[day].states.status for day in changed]
    solved = sum(int((one == SOLVED).sum()) for one in status)
    since_us = changed[0] * DAY_US if changed else None
    return handed, Worked((month,) if runs else (), len(changed), sum(map(len, status)), solved, since_us)


def _between(run: tuple[int, int]) -> range:
    """Give the days of a run."""
    return range(run[0], run[1] + 1)


def _put(job: _Job, stage: str, table: pa.Table, run: tuple[int, int]) -> None:
    """Write rows in the place of those of a run of days."""
    first, after = run[0] * DAY_US, (run[1] + 1) * DAY_US
    job.pass_.splice(job.plan.unit.key, stage, table, first=first, last=after)


def _goes_on(job: _Job, desk: _Desk, month: str) -> bool:
    """Tell whether what changed before a month reaches into it, by windows or by how the month begins."""
    first = month_edges(month)[0]
    near = any(day + job.plan.days_after >= first // DAY_US for day in desk.changed)
    return near or _carried_at(job.before, job.plan.unit.key, first) != _carried_at(
        job.pass_.view(), job.plan.unit.key, first
    )


def _renewed(job: _Job, month: str) -> tuple[Cells, list[int]]:
    """Make cells of a month again where they may have changed: all its cells, and the days that did."""
    plan, (first, last, _) = job.plan, job.record.edges(month)
    old = _stored(job.pass_.view(), plan, first, last)
    begins, began = (_carried_at(view, plan.unit.key, first) for view in (job.pass_.view(), job.before))
    spans = [span for span in job.spans if _meet(span, (first, last))]
    spans += [(first, first + 1)] if begins != began else []
    if last <= first or not spans:
        return old, []
    low = min(span[0] for span in spans) // DAY_US * DAY_US
    high = -(-max(span[1] for span in spans) // DAY_US) * DAY_US
    cells = _made(job, old, (max(low, first), min(high, last)), begins)
    upto = [rows(one, slice(0, int(np.searchsorted(one.start, high)))) for one in (old, cells)]
    if high < last and carried_after(upto[0], began) != carried_after(upto[1], begins):
        cells = _made(job, cells, (high, last), begins)
    return cells, changed_days(old, cells)


def _made(job: _Job, cells: Cells, span: Span, carried: Carried) -> Cells:
    """Make the cells of a span from the readings and put them in the place of those that are there."""
    unit, (first, last) = job.plan.unit, span
    since, until = first - look_back(unit) // _US, last + reach(unit) // _US + 1
    paths = job.pass_.view().paths(SITE, STAGE, first=since, last=until)
    readings = in_span(map(job.read, paths), since, until)
    low, high = np.searchsorted(cells.start, [first, last])
    earlier, later = rows(cells, slice(0, low)), rows(cells, slice(high, None))
    new = make_cells(unit, readings, first, last, carried=carried_after(earlier, carried))
    return Cells(
        *(np.concatenate([getattr(one, f.name) for one in (earlier, new, later)]) for f in fields(Cells))
    )


def _earlier(job: _Job, desk: _Desk, wanted: Sequence[int]) -> Mapping[int, Day]:
    """Work out days before a month from their stored cells, where this pass has not done so already."""
    lacking = sorted(day for day in wanted if day not in desk.days)
    if not lacking:
        return desk.days
    cells = _stored(job.pass_.view(), job.plan, lacking[0] * DAY_US, (lacking[-1] + 1) * DAY_US)
    return worked_out(job.plan, cells, lacking, desk.days)


def _stored(view: Snapshot, plan: Plan, first: int, last: int) -> Cells:
    """Read cells back."""
    table = view.read(plan.unit.key, "cells", first=first, last=last)
    if not table.num_rows:
        return _no_cells(len(plan.unit.instruments))
    return cells_from_frame(plan.unit, table.to_pandas(ignore_metadata=True).set_index("start"))


def _no_cells(instruments: int) -> Cells:
    empty = np.zeros((0, instruments))
    return Cells(
        np.zeros(0, np.int64), empty, empty.astype(np.float32), empty.astype(np.int8), np.zeros(0, np.int8)
    )


def _carried_at(view: Snapshot, unit: str, first: int) -> Carried:
    """Tell what the cells before an instant say of the operating condition, going back as far as it takes."""
    cells = _no_cells(0)
    for month in reversed(view.months(unit, "cells", last=first)):
        edges = month_edges(month)
        table = view.read(
            unit, "cells", first=edges[0], last=min(edges[1], first), columns=["start", "operating"]
        )
        codes = table.column("operating").to_numpy().astype(np.int8)
        cells = replace(
            cells,
            start=np.concatenate([times_us(table), cells.start]),
            operating=np.concatenate([codes, cells.operating]),
        )
        told = cells.operating[cells.operating != NOT_KNOWN]
        if told.size and (told[-1] != STARTING or (told == DOWN).any()):
            break
    return carried_after(cells)


def _forget(pass_: Pass, unit: str) -> None:
    """Take away all that was derived with another unit file or method."""
    for owner, stage, month in pass_.view().parts:
        if owner == unit and stage.startswith(DERIVED):
            pass_.write(unit, stage, month, pa.table({}))


def _mark(plan: Plan) -> str:
    """Tell in one word what a unit is worked out with."""
    return hashlib.sha256(f"{METHOD} {replace(plan.unit, **BESIDE)!r}".encode()).hexdigest()[:16]


def _mark_of(view: Snapshot, unit: str) -> str:
    """Tell what the stored months were worked out with; empty when there are none."""
    table = view.read(unit, PLAN_STAGE)
    return str(table.column("plan")[0]) if table.num_rows else ""
