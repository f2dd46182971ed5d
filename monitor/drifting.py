"""Drift watches brought up to date: blocks out of the store, the expectation, episodes from a calm block on.

A statistic that is at zero has forgotten what came before, so what comes after can be found without it.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from functools import partial
from pathlib import Path

import numpy as np
import pandas as pd
import pyarrow as pa
from numpy.typing import NDArray

from ingest.cells import RUNNING
from ingest.columns import plain, single
from ingest.documents import latest, put
from ingest.errors import OutletError
from ingest.parts import instant_us, month_edges, times_us
from ingest.passes import Pass
from ingest.snapshot import Snapshot
from ingest.unit import Unit, Watch
from monitor.cusum import ALLOWED, Chart, settled
from monitor.departure import SIDES, Blocks, chart_count, charts_of, departures, held_against, learnt, looks
from monitor.drift import MICROSECOND, SUPPRESSED, whole_episodes
from monitor.expectation import (
    DAY_US,
    GOOD_DAYS,
    Expectation,
    band,
    document,
    expected,
    from_document,
    logarithm_pct,
    points,
    variables,
)
from monitor.figures import Figure
from monitor.layout import BAR, figure_stage
from monitor.windows import MODES

KIND = "expectation"  # of the documents that keep each expectation that was in force
NEVER = 2**62  # after any block [us UTC]
Array = NDArray[np.float64]
Times = NDArray[np.int64]


@dataclass(frozen=True, slots=True)
class Drifted:
    """What became of one drift watch: its episodes, what it was held against, and what has to be said."""

    episodes: pd.DataFrame
    expectation: Expectation | None
    notes: tuple[str, ...]


def blocks_of(view: Snapshot, unit: Unit, watch: Watch, first_us: int, last_us: int) -> Blocks:
    """Read the windows of a drift watch that end after one instant and up to another.

    Parameters
    ----------
    view : Snapshot
        With figures and cells of one pass.
    unit : Unit
        Names the operating point.
    watch : Watch
        Names figure, window and mode.
    first_us, last_us : int
        [us UTC]

    Returns
    -------
    Blocks
        Only those of which cells are stored.
    """
    block_us = watch.window // MICROSECOND
    names = [BAR.join((watch.figure, MODES[watch.steady], field)) for field in ("value", "half_width")]
    table = view.read(
        unit.key, figure_stage(watch.window), first=first_us + 1, last=last_us + 1, columns=["end", *names]
    )
    end_us = times_us(table) if table.num_rows else np.zeros(0, dtype=np.int64)
    whole = end_us % block_us == 0
    value, half_width = (_numbers(table, name)[whole] for name in names)
    seen = _of_cells(view, unit, end_us[whole], block_us)
    load = next((seen.mean[one] for one in _load(unit)), np.full(len(value), np.nan))
    return Blocks(
        end_us=end_us[whole],
        value=value,
        half_width=half_width,
        point=points(unit, seen.mean) if seen.mean else np.zeros((len(value), 0)),
        load_pct=logarithm_pct(load),
        idle=seen.idle,
        running=seen.running,
    )


def drifted(
    view: Snapshot,
    unit: Unit,
    watch: Watch,
    *,
    figures: Mapping[str, Figure],
    stored: pd.DataFrame,
    since_us: int,
) -> Drifted:
    """Find the episodes of one drift watch, given those from before some of its figures changed.

    Parameters
    ----------
    view : Snapshot
        With figures and cells of the same pass.
    unit : Unit
        Has a healthy period.
    watch : Watch
        With a test other than limits.
    figures : mapping of str to Figure
        By name.
    stored : DataFrame
        Episodes of this watch as they were; not changed.
    since_us : int
        From when on figures are others than those that they were found in [us UTC].

    Returns
    -------
    Drifted
        Without an expectation there are no episodes, and a note says why.
    """
    healthy = unit.healthy
    if healthy is None:
        return Drifted(whole_episodes([]), None, ())
    first_us, last_us = instant_us(healthy.first), instant_us(healthy.last)
    end_us = instant_us(month_edges(view.months(unit.key, "cells")[-1])[1])
    try:
        one = learnt(unit, healthy, watch, blocks_of(view, unit, watch, first_us, last_us))
    except OutletError as error:
        return Drifted(whole_episodes([]), None, (f"{unit.key}, {watch.name}: {error.what}",))
    sides, charts = looks(watch, figures[watch.figure]), chart_count(unit, figures)
    calm_us = last_us
    if since_us > last_us and watch.test == "cusum":
        cusum = charts_of(watch, one.noise, one.block_us, charts)
        calm_us = _calm_before(view, unit, watch, (one, cusum, sides), stored=stored, since_us=since_us)
    kept = stored[[cleared <= calm_us for _, cleared in spans(stored)]]
    changed = [instant_us(e.at) for e in unit.events if e.kind == "catalyst change" and e.at >= healthy.last]
    later = blocks_of(view, unit, watch, calm_us - one.block_us, min([end_us, *changed]))
    found = departures(watch, later, one, sides=sides, charts=charts)
    return Drifted(whole_episodes([kept, found]), one, tuple(_notes(unit, watch, one, later)))


def in_force(folder: Path, unit: str, watch: str) -> Expectation | None:
    """Give the expectation that a drift watch was last held against.

    Parameters
    ----------
    folder : Path
        The store.
    unit, watch : str
        Key of the unit and name of the watch.

    Returns
    -------
    Expectation or None
        None while none was learnt.
    """
    kept = latest(folder, unit, KIND, watch)
    return None if kept is None else from_document(kept.body)


def shown(
    view: Snapshot, unit: Unit, watch: Watch, one: Expectation, span_us: tuple[int, int]
) -> pd.DataFrame:
    """Give what a figure was, and what was to be expected of it, block by block.

    Parameters
    ----------
    view : Snapshot
        With figures and cells of one pass.
    unit : Unit
        Names the operating point.
    watch : Watch
        Names figure, window and mode.
    one : Expectation
        Of the figure.
    span_us : tuple of int
        Blocks that end after the first and up to the second [us UTC].

    Returns
    -------
    DataFrame
        As `expectation.band` gives it, with the figure as `value`.
    """
    blocks = blocks_of(view, unit, watch, *span_us)
    return band(one, blocks.end_us, blocks.point).assign(value=blocks.value)


def spans(episodes: pd.DataFrame) -> Iterator[tuple[int, int]]:
    """Give from the first crossing to the end of each episode.

    Parameters
    ----------
    episodes : DataFrame
        Columns `drift.EPISODE_COLUMNS`.

    Yields
    ------
    tuple of int
        [us UTC]; the end of an open one is never.
    """
    for first, cleared in zip(episodes.get("first_crossed", ()), episodes.get("cleared", ()), strict=True):
        yield instant_us(first), NEVER if pd.isna(cleared) else instant_us(cleared)


def keep(pass_: Pass, unit: Unit, watch: Watch, one: Expectation | None) -> None:
    """Keep an expectation with the commit of a pass; one that is in force already adds no revision.

    Parameters
    ----------
    pass_ : Pass
        Open.
    unit : Unit
    watch : Watch
        Names the document.
    one : Expectation or None
        None keeps nothing.
    """
    if one is not None:
        pass_.at_commit(partial(put, unit=unit.key, kind=KIND, key=watch.name, body=document(one)))


def _calm_before(
    view: Snapshot,
    unit: Unit,
    watch: Watch,
    held: tuple[Expectation, Sequence[Chart], Sequence[str]],
    *,
    stored: pd.DataFrame,
    since_us: int,
) -> int:
    """Give the end of the last block before an instant at which every sum was zero, back month by month."""
    one, charts, sides = held
    for month in reversed(view.months(unit.key, figure_stage(watch.window))):
        first, last = (instant_us(edge) for edge in month_edges(month))
        if last <= one.last_us:
            break
        if first >= since_us:
            continue
        blocks = blocks_of(view, unit, watch, max(first, one.last_us) - one.block_us, min(last, since_us - 1))
        told, seen = held_against(blocks, one)
        calm = np.logical_and.reduce(
            [settled(SIDES[side] * (told.value - seen), told.error, charts) for side in sides]
        )
        for begun, cleared in spans(stored):
            calm &= (blocks.end_us < begun) | (blocks.end_us > cleared)
        if calm.any():
            return int(blocks.end_us[np.flatnonzero(calm)[-1]])
    return one.last_us


def _notes(unit: Unit, watch: Watch, one: Expectation, later: Blocks) -> Iterator[str]:
    """Say what speaks against relying on an expectation: little to learn from, a unit run as it never was."""
    if one.days < GOOD_DAYS:
        yield f"{unit.key}, {watch.name}: learnt from {one.days:.0f} healthy days; {GOOD_DAYS:g} are better"
    told = expected(one, later.end_us, later.point)
    unsure = float(np.nanmax(told.error[-1:], initial=0.0)) / ALLOWED
    if unsure > watch.shift_pct / 2:
        yield (
            f"{unit.key}, {watch.name}: so long after the healthy period, or so far from it, only changes "
            f"above {2 * unsure:.1f} % are found; write a newer healthy period once there is one"
        )
    recent = (later.end_us > later.end_us[-1:] - DAY_US) & later.running
    for place in np.unique(told.outside[recent & (told.outside >= 0)]).tolist():
        there = recent & (told.outside == place)
        most = told.beyond[there][np.abs(told.beyond[there]).argmax()]
        side = "above" if most > 0 else "below"
        yield (
            f"{unit.key}, {watch.name}: on the last day {one.names[place]} lay up to {abs(most):.3g} {side} "
            f"what was seen while healthy, in {int(there.sum())} blocks; the expectation is less sure there"
        )


@dataclass(frozen=True, slots=True)
class _Seen:
    """What the cells of some blocks say: means by instrument, whether all ran, whether the last was idle."""

    mean: dict[str, Array]
    running: NDArray[np.bool_]
    idle: NDArray[np.bool_]


def _of_cells(view: Snapshot, unit: Unit, ends: Times, block_us: int) -> _Seen:
    """Read what the cells of some blocks say."""
    wanted = tuple(dict.fromkeys((*_load(unit), *variables(unit))))
    if not len(ends):
        return _Seen(dict.fromkeys(wanted, np.zeros(0)), np.zeros(0, bool), np.zeros(0, bool))
    columns = ["start", "operating", *(f"value {name}" for name in wanted)]
    cells = view.read(unit.key, "cells", first=int(ends[0]) - block_us, last=int(ends[-1]), columns=columns)
    codes: NDArray[np.int8] = plain(single(cells.column("operating")), np.int8)
    block = times_us(cells) // block_us * block_us + block_us
    place = np.where(np.isin(block, ends), np.searchsorted(ends, block), len(ends))
    last = np.searchsorted(block, ends, side="right") - 1
    values = {name: plain(single(cells.column(f"value {name}")), np.float64) for name in wanted}
    ran = np.bincount(place, codes == RUNNING, minlength=len(ends) + 1)[:-1]
    return _Seen(
        {name: _means(value, place, len(ends)) for name, value in values.items()},
        ran == block_us * MICROSECOND // unit.cell,
        np.isin(codes[last], SUPPRESSED),
    )


def _numbers(table: pa.Table, name: str) -> Array:
    """Give a column that is stored as float32; nothing where the stage is not there."""
    if not table.num_rows:
        return np.zeros(0)
    numbers: NDArray[np.float32] = plain(single(table.column(name)), np.float32)
    return numbers.astype(np.float64)


def _means(value: Array, place: NDArray[np.intp], count: int) -> Array:
    """Means of what was seen in each block; NaN where nothing was."""
    seen = np.isfinite(value)
    number, total = (
        np.bincount(place[seen], weights, minlength=count + 1)[:count] for weights in (None, value[seen])
    )
    return np.where(number > 0, total / np.maximum(number, 1), np.nan)


def _load(unit: Unit) -> tuple[str, ...]:
    """Name the instrument that tells the load, if there is one."""
    return () if unit.operating is None else (unit.operating.load,)
