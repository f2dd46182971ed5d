"""The episodes of a unit brought up to date: only from where changed figures can move them on.

An episode is a pure function of the whole history of a figure. Before a calm row, one that is seen, beyond
no limit and in no episode, nothing is pending: what comes after it can be found without what lies before.
"""

from __future__ import annotations

import hashlib
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from datetime import timedelta
from functools import cache, partial

import numpy as np
import pandas as pd
import pyarrow as pa
from numpy.typing import NDArray

from ingest.columns import plain, single
from ingest.parts import month_edges, times_us
from ingest.passes import Pass
from ingest.snapshot import Snapshot
from ingest.unit import Unit, Watch
from monitor.days import figure_step
from monitor.drift import MICROSECOND, limit_episodes, whole_episodes
from monitor.drifting import drifted, keep, spans
from monitor.figures import Figure
from monitor.layout import BAR, figure_stage
from monitor.windows import MODES

MARK_STAGE, MARK_MONTH = "watches", "1970-01"  # one row that tells what the stored episodes were found with
BEGINNING = -(2**62)  # before any row [us UTC]
FIELDS = ("value", "half_width")
Array = NDArray[np.float64]
Times = NDArray[np.int64]
Codes = NDArray[np.int8]


@dataclass(frozen=True, slots=True)
class _Rows:
    """What the watches on one window look at in one month, r rows."""

    end_us: Times  # (r,)
    figures: Mapping[tuple[str, bool], tuple[Array, Array]]  # figure, steady: value and half-width, (r,)
    operating: Codes  # (r,) of the cell that ends with each row


def bring_up(pass_: Pass, unit: Unit, figures: Sequence[Figure], since_us: int | None) -> tuple[str, ...]:
    """Bring the stored episodes of a unit up to date.

    Parameters
    ----------
    pass_ : Pass
        Open, with all cells and figures written.
    unit : Unit
        Gives the watches.
    figures : sequence of Figure
        Those of the unit.
    since_us : int or None
        From when on cells have changed [us UTC]; None if none did.

    Returns
    -------
    tuple of str
        What has to be said about the expectations that drift watches hold figures against.
    """
    view, mark = pass_.view(), _mark(unit)
    if not view.months(unit.key, "cells"):
        return ()
    if _mark_of(view, unit.key) != mark:
        start = pa.array([0], pa.timestamp("us", "UTC"))
        pass_.write(unit.key, MARK_STAGE, MARK_MONTH, pa.table({"start": start, "watches": [mark]}))
        since_us = BEGINNING
    if since_us is None:
        return ()
    stored, named = view.episodes(unit.key), {figure.name: figure for figure in figures}
    notes: list[str] = []
    found = [episodes_since(view, unit, stored, since_us)]
    for watch in (one for one in unit.watches if one.test != "limits"):
        own = _own(stored, watch)
        told = drifted(view, unit, watch, figures=named, stored=own, since_us=since_us)
        keep(pass_, unit, watch, told.expectation)
        found.append(told.episodes)
        notes += told.notes
    pass_.replace_episodes(unit.key, whole_episodes(found))
    return tuple(notes)


def episodes_since(view: Snapshot, unit: Unit, stored: pd.DataFrame, since_us: int) -> pd.DataFrame:
    """Find the episodes of a unit's limits, given those from before some of its figures changed.

    Parameters
    ----------
    view : Snapshot
        With figures and cells of the same pass.
    unit : Unit
        Gives the watches.
    stored : DataFrame
        Episodes as they were; not changed.
    since_us : int
        From when on figures are others than those that they were found in [us UTC].

    Returns
    -------
    DataFrame
        As `drift.unit_episodes` gives it for the whole record.
    """
    read = cache(partial(_month, view, unit))
    found = []
    for watch in (one for one in unit.watches if one.test == "limits"):
        own = _own(stored, watch)
        months = view.months(unit.key, figure_stage(watch.window))
        calm_us = _calm_before(unit, watch, own, since_us, [partial(read, watch.window, m) for m in months])
        kept = own[[cleared <= calm_us for _, cleared in spans(own)]]
        after = [read(watch.window, month) for month in months if month_edges(month)[1] > calm_us]
        found += [kept, limit_episodes(watch, *_from(watch, after, calm_us))]
    return whole_episodes(found)


def _own(stored: pd.DataFrame, watch: Watch) -> pd.DataFrame:
    """Give the episodes of one watch."""
    return stored[[name == watch.name for name in stored.get("watch", ())]]


def _calm_before(
    unit: Unit, watch: Watch, own: pd.DataFrame, since_us: int, months: Sequence[Callable[[], _Rows]]
) -> int:
    """Give the last calm row before an instant [us UTC], looking back month by month."""
    for read in reversed(months) if since_us > BEGINNING and watch.among == 1 else ():
        rows = read()
        value, _ = rows.figures[watch.figure, watch.steady]
        # With the row after it, which tells the step of what follows.
        calm = (np.diff(rows.end_us, append=0) == figure_step(unit) // MICROSECOND) & np.isfinite(value)
        calm &= rows.end_us < since_us
        calm &= (value >= (-np.inf if watch.low is None else watch.low)) & (
            value <= (np.inf if watch.high is None else watch.high)
        )
        for first, cleared in spans(own):
            calm &= (rows.end_us < first) | (rows.end_us >= cleared)
        if calm.any():
            return int(rows.end_us[np.flatnonzero(calm)[-1]])
    return BEGINNING


def _from(watch: Watch, months: Sequence[_Rows], first_us: int) -> tuple[Times, Array, Array, Codes]:
    """Give window ends, value, half-width and operating condition of what a watch looks at from a row on."""
    if not months:
        return np.zeros(0, np.int64), np.zeros(0), np.zeros(0), np.zeros(0, np.int8)
    end_us = np.concatenate([one.end_us for one in months])
    figures = [one.figures[watch.figure, watch.steady] for one in months]
    value, half_width = (np.concatenate(one) for one in zip(*figures, strict=True))
    operating = np.concatenate([one.operating for one in months])
    inside = slice(int(np.searchsorted(end_us, first_us)), None)
    return end_us[inside], value[inside], half_width[inside], operating[inside]


def _month(view: Snapshot, unit: Unit, window: timedelta, month: str) -> _Rows:
    """Read what the watches on one window look at in one month."""
    first, last = month_edges(month)
    wanted = {(one.figure, one.steady) for one in unit.watches if one.window == window}
    names = {at: [BAR.join((at[0], MODES[at[1]], field)) for field in FIELDS] for at in wanted}
    columns = ["end", *(name for both in names.values() for name in both)]
    table = view.read(unit.key, figure_stage(window), first=first, last=last, columns=columns)
    cell_us, end_us = unit.cell // MICROSECOND, times_us(table)
    cells = view.read(unit.key, "cells", first=first - cell_us, last=last, columns=["start", "operating"])
    codes: Codes = plain(single(cells.column("operating")), np.int8)
    return _Rows(
        end_us=end_us,
        figures={at: (_numbers(table, a), _numbers(table, b)) for at, (a, b) in names.items()},
        operating=codes[np.searchsorted(times_us(cells), end_us - cell_us)],
    )


def _numbers(table: pa.Table, name: str) -> Array:
    """Give a column that is stored as float32."""
    numbers: NDArray[np.float32] = plain(single(table.column(name)), np.float32)
    return numbers.astype(np.float64)


def _mark(unit: Unit) -> str:
    """Tell in one word what the episodes of a unit are found with."""
    tests = any(watch.test != "limits" for watch in unit.watches)
    drift = (unit.healthy, unit.events) if tests else ()
    return hashlib.sha256(f"{unit.watches!r}{drift!r}".encode()).hexdigest()[:16]


def _mark_of(view: Snapshot, unit: str) -> str:
    """Tell what the stored episodes were found with; empty when there are none."""
    table = view.read(unit, MARK_STAGE)
    return str(table.column("watches")[0]) if table.num_rows else ""
