"""Which months of a unit a pass has to work out again, and working them out into the open pass.

A month is due when readings came in that reach its cells or the windows over them, when the record grew into
it, when the operating condition it begins with changed, or when the unit file changed since.
"""

from __future__ import annotations

import hashlib
from collections.abc import Callable, Iterator, Sequence
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
    cells_from_frame,
    look_back,
    reach,
)
from ingest.parts import month_edges, month_of, times_us
from ingest.passes import Pass
from ingest.readings import Readings, in_span, month_tags, read_month
from ingest.snapshot import Snapshot
from monitor.months import Month, Plan, work

METHOD = "1"  # to be raised when the same readings and unit file give other numbers: all months become due
PLAN_STAGE, PLAN_MONTH = "plan", "1970-01"  # one row that tells what the stored months were worked out with
DERIVED = ("cells", "states", "figures-")
# What a unit file says that no stored number depends on: a change of it makes nothing due.
BESIDE: dict[str, Any] = {
    "name": "", "watches": (), "healthy": None, "events": (), "budget": (), "guarantee": ()
}  # fmt: skip
_US = timedelta(microseconds=1)
Progress = Callable[[str, int, int], None]
Read = Callable[[Path], Readings]


@dataclass(frozen=True, slots=True)
class Worked:
    """What was worked out of one unit: months, their cells, and how many of these the balance solved."""

    months: tuple[str, ...] = ()
    cells: int = 0
    solved: int = 0


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
    due = sorted(record.months if anew else _touched(plan, record, before, touched))
    worked = Worked()
    while due:
        month = due.pop(0)
        progress(unit, len(worked.months), len(worked.months) + 1 + len(due))
        made = _work(pass_, plan, record, month, read)
        _write(pass_, unit, month, made)
        worked = Worked((*worked.months, month), worked.cells + made.cells, worked.solved + made.solved)
        following = next((later for later in record.months if later > month), None)
        if following and following not in due and _begins_otherwise(pass_, before, unit, following):
            due.insert(0, following)
    progress(unit, len(worked.months), len(worked.months))
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


def _touched(plan: Plan, record: _Record, before: Snapshot, touched: Sequence[Span]) -> set[str]:
    """List the months whose cells or windows the new readings can change."""
    ahead, behind = reach(plan.unit) // _US, look_back(plan.unit) // _US
    spans = [(first - ahead, last + behind) for first, last in touched]
    known = before.months(plan.unit.key, "cells")
    first, last = (_starts(before, plan.unit.key, month) for month in (known[0], known[-1]))
    # Where the record grew at either end there are cells that were not there before.
    spans += [(record.first_us, int(first[0])), (int(last[-1]) + plan.cell_us, record.last_us)]
    due = {
        month
        for month in record.months
        for low, high in spans
        if low < high and month_edges(month)[0] <= high + plan.lead_us and month_edges(month)[1] >= low
    }
    behind_new = {month_of(month_edges(month)[1]) for month in due - set(known)}
    return due | (behind_new & set(record.months))


def _starts(view: Snapshot, unit: str, month: str) -> NDArray[np.int64]:
    """Read the cell starts of a month [us UTC]."""
    first, last = month_edges(month)
    return times_us(view.read(unit, "cells", first=first, last=last, columns=["start"]))


def _tags(plan: Plan) -> list[str]:
    """List the tags of a unit."""
    return [one.tag for one in plan.unit.instruments if one.tag is not None]


def _work(pass_: Pass, plan: Plan, record: _Record, month: str, read: Read) -> Month:
    """Gather what a month needs and work it out."""
    unit, view = plan.unit, pass_.view()
    first, last, after = record.edges(month)
    since, until = first - look_back(unit) // _US, last + reach(unit) // _US + 1
    readings = in_span(map(read, view.paths(SITE, STAGE, first=since, last=until)), since, until)
    carried = _carried_at(view, unit.key, first)
    return work(
        plan, readings, (first, last, after), before=_cells_before(view, plan, first), carried=carried
    )


def _cells_before(view: Snapshot, plan: Plan, first: int) -> Cells:
    """Read the cells of the longest window before an instant, from the last hole on."""
    unit = plan.unit
    table = view.read(unit.key, "cells", first=first - plan.lead_us, last=first)
    if not table.num_rows:
        return _no_cells(len(unit.instruments))
    frame = table.to_pandas(ignore_metadata=True).set_index("start")
    cells = cells_from_frame(unit, frame)
    holes = np.flatnonzero(np.diff(cells.start, append=first) > plan.cell_us)
    begin = int(holes[-1]) + 1 if holes.size else 0
    return Cells(*(getattr(cells, field.name)[begin:] for field in fields(Cells)))


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


def _begins_otherwise(pass_: Pass, before: Snapshot, unit: str, month: str) -> bool:
    """Tell whether a month begins with another operating condition than when it was last worked out."""
    first = month_edges(month)[0]
    return _carried_at(before, unit, first) != _carried_at(pass_.view(), unit, first)


def _write(pass_: Pass, unit: str, month: str, made: Month) -> None:
    """Write a month's stages in the place of all that were derived for it."""
    gone = {s for u, s, m in pass_.view().parts if (u, m) == (unit, month) and s.startswith(DERIVED)}
    for stage in gone - made.stages.keys():
        pass_.write(unit, stage, month, pa.table({}))
    for stage, table in made.stages.items():
        pass_.write(unit, stage, month, table)


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
