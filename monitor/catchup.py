"""Which months of a unit a pass has to work out again, and working them out into the open pass.

A month is due when readings came in that reach its cells or the windows over them, when the record grew into
it, when the operating condition it begins with changed, or when the unit file changed since.
"""

from __future__ import annotations

import hashlib
from collections.abc import Callable, Iterator
from dataclasses import dataclass, fields, replace
from datetime import timedelta

import numpy as np
import pyarrow as pa

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
from ingest.readings import Readings, read_months
from ingest.snapshot import Snapshot
from monitor.months import Month, Plan, work

METHOD = "1"  # to be raised when the same readings and unit file give other numbers: all months become due
PLAN_STAGE, PLAN_MONTH = "plan", "1970-01"  # one row that tells what the stored months were worked out with
DERIVED = ("cells", "states", "figures-")
_US = timedelta(microseconds=1)
Span = tuple[int, int]  # first and last instant [us UTC], both included
Progress = Callable[[str, int, int], None]


@dataclass(frozen=True, slots=True)
class Worked:
    """What was worked out of one unit: months, their cells, and how many of these the balance solved."""

    months: tuple[str, ...] = ()
    cells: int = 0
    solved: int = 0


def catch_up(pass_: Pass, before: Snapshot, plan: Plan, touched: Span | None, progress: Progress) -> Worked:
    """Work out every month of a unit that is due and write it into the pass.

    Parameters
    ----------
    pass_ : Pass
        Open, with all new readings written.
    before : Snapshot
        The store as the last pass left it.
    plan : Plan
        Of the unit.
    touched : tuple of int, optional
        First and last time of the readings that came in or changed [us UTC].
    progress : callable
        Told the unit, months done and months due.

    Returns
    -------
    Worked
    """
    unit = plan.unit.key
    record = _record(plan, pass_.view())
    if record is None:
        return Worked()
    anew = _mark(plan) != _mark_of(before, unit)
    if anew:
        _forget(pass_, unit)
    due = sorted(record.months if anew else _touched(plan, record, before, touched))
    worked = Worked()
    while due:
        month = due.pop(0)
        progress(unit, len(worked.months), len(worked.months) + 1 + len(due))
        made = _work(pass_, plan, record, month)
        _write(pass_, unit, month, made)
        worked = Worked((*worked.months, month), worked.cells + made.cells, worked.solved + made.solved)
        following = next((later for later in record.months if later > month), None)
        if following and following not in due and _begins_otherwise(pass_, before, unit, following):
            due.insert(0, following)
    if worked.months:
        progress(unit, len(worked.months), len(worked.months))
    if anew:
        start = pa.array([0], pa.timestamp("us", "UTC"))
        pass_.write(unit, PLAN_STAGE, PLAN_MONTH, pa.table({"start": start, "plan": [_mark(plan)]}))
    return worked


@dataclass(frozen=True, slots=True)
class _Record:
    """The time that readings cover: start of the first cell, end of the last [us UTC], months with work."""

    first_us: int
    last_us: int
    months: tuple[str, ...]

    def edges(self, month: str) -> tuple[int, int, int]:
        """Give first cell start, end of the cells and end of a month [us UTC]."""
        first, after = month_edges(month)
        first = max(first, self.first_us)
        return first, max(first, min(after, self.last_us)), after


def _record(plan: Plan, view: Snapshot) -> _Record | None:
    """Tell what time the readings cover; None without readings."""
    read = view.months(plan.unit.key, "readings")
    if not read:
        return None
    first, last = (
        function(
            times_us(view.read(plan.unit.key, "readings", first=edges[0], last=edges[1], columns=["time"]))
        )
        for function, edges in ((np.min, month_edges(read[0])), (np.max, month_edges(read[-1])))
    )
    # The window that ends with a month belongs to the next one, whether that has readings or not.
    ended = {month_of(month_edges(month)[1]) for month in read if month_edges(month)[1] <= last}
    return _Record(int(first) // plan.cell_us * plan.cell_us, int(last), tuple(sorted({*read, *ended})))


def _touched(plan: Plan, record: _Record, before: Snapshot, touched: Span | None) -> Iterator[str]:
    """List the months whose cells or windows the new readings can change."""
    if touched is None:
        return
    low, high = touched[0] - reach(plan.unit) // _US, touched[1] + look_back(plan.unit) // _US
    known = before.months(plan.unit.key, "cells")
    if known:
        old_first, old_last = (
            times_us(before.read(plan.unit.key, "cells", first=edges[0], last=edges[1], columns=["start"]))[
                place
            ]
            for place, edges in ((0, month_edges(known[0])), (-1, month_edges(known[-1])))
        )
        low = min(low, int(old_last)) if touched[1] > old_last else low
        high = max(high, int(old_first)) if touched[0] < old_first else high
    for month in record.months:
        first, after = month_edges(month)
        if first <= high + plan.lead_us and after >= low:
            yield month


def _work(pass_: Pass, plan: Plan, record: _Record, month: str) -> Month:
    """Gather what a month needs and work it out."""
    unit, view = plan.unit, pass_.view()
    first, last, after = record.edges(month)
    since, until = first - look_back(unit) // _US, last + reach(unit) // _US + 1
    tags = [one.tag for one in unit.instruments if one.tag is not None]
    files = view.paths(unit.key, "readings", first=since, last=until)
    readings: Readings = read_months(files, tags, since, until)
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
    for stage, frame in made.stages.items():
        pass_.write(unit, stage, month, pa.Table.from_pandas(frame.reset_index(), preserve_index=False))


def _forget(pass_: Pass, unit: str) -> None:
    """Take away all that was derived with another unit file or method."""
    for owner, stage, month in pass_.view().parts:
        if owner == unit and stage.startswith(DERIVED):
            pass_.write(unit, stage, month, pa.table({}))


def _mark(plan: Plan) -> str:
    """Tell in one word what a unit is worked out with."""
    return hashlib.sha256(f"{METHOD} {replace(plan.unit, watches=(), name='')!r}".encode()).hexdigest()[:16]


def _mark_of(view: Snapshot, unit: str) -> str:
    """Tell what the stored months were worked out with; empty when there are none."""
    table = view.read(unit, PLAN_STAGE)
    return str(table.column("plan")[0]) if table.num_rows else ""
