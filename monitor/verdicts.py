"""The verdicts of a unit's episodes, kept with them: made once eight hours are there, and where data changed.

A verdict is a pure function of the unit file, the healthy time, the window and two days before it, in cells
of ten minutes or more; where eight hours do not tell, of one and three days later, since much grows. It is
taken over from the last pass where none of these changed; so an old episode costs a comparison of names.
"""

from __future__ import annotations

import hashlib
from collections.abc import Callable, Mapping
from dataclasses import dataclass, replace
from datetime import timedelta
from functools import lru_cache
from typing import Any

import numpy as np
import pandas as pd

from ingest.balance import Problem
from ingest.cells import Cells, cells_from_frame
from ingest.parts import month_edges, times_us
from ingest.snapshot import Snapshot
from ingest.unit import Unit
from monitor.coarse import coarse, coarse_unit
from monitor.days import rows
from monitor.explain import Reference, explain, picture_of
from monitor.healthy import LENGTH, Baseline, baseline_of
from monitor.verdict import COLUMN, INSTRUMENT, LEAD, REACTOR, as_text, is_marked

METHOD = "2"  # to be raised when the same cells give another verdict
BEFORE = timedelta(days=30)  # healthy time where none is stated: so much before the episode
APART = timedelta(days=1)  # left out between that and the onset
AGAIN = (timedelta(hours=16), timedelta(hours=64))  # after the first window, if that tells nothing
_US = timedelta(microseconds=1)

Span = tuple[int, int]


@dataclass(frozen=True, slots=True)
class _Window:
    """What a verdict rests on [us UTC]: ends of its windows, its healthy time, whether more is to come."""

    ends: tuple[int, ...]
    healthy: Span
    is_provisional: bool
    mark: str = ""  # of all this, the unit file and the method


def with_verdicts(
    before: Snapshot, view: Snapshot, unit: Unit, problem: Problem, episodes: pd.DataFrame
) -> pd.DataFrame:
    """Give the episodes of a unit with their verdicts.

    Parameters
    ----------
    before : Snapshot
        The store as the last pass left it.
    view : Snapshot
        The store with the cells of this pass.
    unit : Unit
        The reactor.
    problem : Problem
        Its balance.
    episodes : DataFrame
        As `drift.unit_episodes` gives them.

    Returns
    -------
    DataFrame
        With one more column: the verdict as text, empty where nothing of the window is there.
    """
    known = {_key(row): row.get(COLUMN) for row in before.episodes(unit.key).to_dict("records")}
    end_us, same = _end_us(view, unit), _same_in(before, view, unit)
    unit = coarse_unit(unit)
    made_with = f"{METHOD} {unit!r}"
    refer = lru_cache(maxsize=4)(lambda span: _reference(view, unit, problem, span))
    told = []
    for row in episodes.to_dict("records"):
        window, text = _window(unit, row, end_us), known.get(_key(row))
        mark = hashlib.sha256(f"{made_with} {window!r}".encode()).hexdigest()[:16]
        is_kept = isinstance(text, str) and is_marked(text, mark)
        is_kept = is_kept and same(_with_lead(window)) and same(window.healthy)
        told.append(text if is_kept else _verdict(view, unit, problem, replace(window, mark=mark), refer))
    return episodes.assign(**{COLUMN: pd.Series(told, index=episodes.index, dtype="str")})


def _key(row: Mapping[Any, Any]) -> tuple[str, str, str]:
    return str(row["watch"]), str(row["side"]), str(row["raised"])


def _end_us(view: Snapshot, unit: Unit) -> int:
    """Give the end of the record [us UTC]."""
    months = view.months(unit.key, "cells")
    starts = times_us(view.read(unit.key, "cells", first=month_edges(months[-1])[0], columns=["start"]))
    return int(starts[-1]) + unit.cell // _US


def _window(unit: Unit, row: Mapping[Any, Any], end_us: int) -> _Window:
    """Give eight hours after the onset, less where the record or the episode ends before, and later ones."""
    onset, is_open = row.get("onset"), bool(pd.isna(row["cleared"]))
    since = _us(row["first_crossed"] if onset is None or pd.isna(onset) else onset)
    last = end_us if is_open else min(end_us, _us(row["cleared"]))
    first = max(min(since + LENGTH // _US, last), _us(row["raised"]))
    later = [first + wait // _US for wait in AGAIN]
    cell = unit.cell // _US
    healthy = (since - (BEFORE + APART) // _US, since - APART // _US)
    if unit.healthy:
        healthy = (_us(unit.healthy.first), _us(unit.healthy.last))
    ends = (first, *(one for one in later if one <= last))
    is_early = is_open and end_us < since + LENGTH // _US
    return _Window(tuple(one // cell * cell for one in ends), healthy, is_early)


def _us(moment: Any) -> int:
    return round(float(moment.timestamp()) * 1e6)


def _same_in(before: Snapshot, view: Snapshot, unit: Unit) -> Callable[[Span], bool]:
    """Give what tells whether the cells of a span are what they were; most often no file is read for it."""
    old, new = (
        {month: part for (u, stage, month), part in one.parts.items() if (u, stage) == (unit.key, "cells")}
        for one in (before, view)
    )
    changed = {month for month in old.keys() | new.keys() if old.get(month) != new.get(month)}

    def same(span: Span) -> bool:
        if not any(month_edges(month)[0] < span[1] and span[0] < month_edges(month)[1] for month in changed):
            return True
        cells = [one.read(unit.key, "cells", first=span[0], last=span[1]) for one in (before, view)]
        return bool(cells[0].equals(cells[1]))

    return same


def _with_lead(window: _Window) -> Span:
    """Give all the time that a verdict looks at."""
    return window.ends[0] - (LENGTH + LEAD) // _US, window.ends[-1]


def _cells(view: Snapshot, unit: Unit, span: Span) -> Cells | None:
    """Read cells; None where there are none, or not all up to the end follow one another."""
    table = view.read(unit.key, "cells", first=span[0], last=span[1])
    if not table.num_rows:
        return None
    cells = cells_from_frame(unit, table.to_pandas(ignore_metadata=True).set_index("start"))
    step = np.diff(cells.start)
    holes = np.flatnonzero(step > step.min(initial=unit.cell // _US))
    return coarse(unit, rows(cells, slice(int(holes[-1]) + 1 if len(holes) else 0, None)))


def _reference(view: Snapshot, unit: Unit, problem: Problem, span: Span) -> Reference:
    """Make the healthy time ready; what is learnt of it is learnt when it is first asked for."""
    cells = _cells(view, unit, span)
    if cells is None or not len(cells.start):
        return Reference((), unit.healthy is not None, None, lambda there: None)
    found = cells

    @lru_cache(maxsize=8)
    def learn(there: bytes) -> Baseline | None:
        return baseline_of(unit, problem, found, np.frombuffer(there, dtype=bool))

    held = (int(found.start[0]), int(found.start[-1]) + unit.cell // _US)
    return Reference(held, unit.healthy is not None, picture_of(unit, problem, found), learn)


def _verdict(
    view: Snapshot,
    unit: Unit,
    problem: Problem,
    window: _Window,
    refer: Callable[[Span], Reference],
) -> str:
    """Make a verdict of the first window that tells a class, else of the last; empty without cells."""
    cells = _cells(view, unit, _with_lead(window))
    text = ""
    for end in window.ends:
        first = end - LENGTH // _US
        seen = None if cells is None else _between(cells, first - LEAD // _US, end)
        if seen is None or not len(seen.start) or seen.start[-1] < first:
            continue
        begin = max(first, int(seen.start[0]))
        reference, mark = refer(window.healthy), window.mark
        early = window.is_provisional
        found = explain(unit, problem, reference, seen, begin, is_provisional=early, mark=mark)
        text = as_text(found)
        if found.word in (INSTRUMENT, REACTOR):
            break
    return text


def _between(cells: Cells, first_us: int, last_us: int) -> Cells:
    """Give the cells that start within a span."""
    return rows(cells, slice(*np.searchsorted(cells.start, [first_us, last_us]).tolist()))
