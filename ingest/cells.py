"""From readings to cells: dead time, hold, the time-weighted mean of what was valid, operating condition.

Each reading stands for a span of time. Spans are cut at the edges of the cells and summed cell by cell, so
that a cell depends on the readings around it and on nothing else: not on where a pass begins or ends (no
running total over the whole series), and a wild reading spoils its own cell only.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from datetime import timedelta
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from ingest.conditions import CONDITIONS, GOOD, LARGEST, MISSING, STALE, SUSPECTS, takes_part
from ingest.errors import StoreError
from ingest.readings import BAD, Readings, Series, empty
from ingest.samples import sums
from ingest.screen import looks_ahead, looks_back, screened
from ingest.unit import Instrument, Operating, Unit
from ingest.votes import majority, voters

OPERATING = ("running", "starting", "down", "turned down", "not known")
RUNNING, STARTING, DOWN, TURNED_DOWN, NOT_KNOWN = range(5)

LAB = "lab sample"
LEAST_SHARE = 0.5  # below it more of the cell is unseen than seen, and its mean is no longer the cell's

Floats = NDArray[np.float64]
Times = NDArray[np.int64]
Codes = NDArray[np.int8]
Flags = NDArray[np.bool_]
Places = NDArray[np.intp]

_NEVER = np.iinfo(np.int64).max // 2  # microseconds; far enough off to add to without overflow
_US = timedelta(microseconds=1)


@dataclass(frozen=True, slots=True)
class Cells:
    """One row per cell, one column per instrument of the unit, in its order.

    `value` is NaN unless `condition` is good or suspect; `share` is the valid share of the cell either way.
    """

    start: Times  # (t,) us UTC, a regular grid
    value: Floats  # (t, m) mean in the instrument's own unit
    share: NDArray[np.float32]  # (t, m)
    condition: Codes  # (t, m) index into conditions.CONDITIONS
    operating: Codes  # (t,) index into OPERATING


@dataclass(frozen=True, slots=True)
class Carried:
    """What the operating condition remembers from before a cell: was the unit down, when did it come back.

    `down` is None while nothing has told; `returned_us` is None unless the unit was still starting.
    """

    down: bool | None = None
    returned_us: int | None = None


@dataclass(frozen=True, slots=True)
class _Rule:
    """How one way of sampling turns a stamp into the span of time for which the value stands."""

    ends: bool  # the stamp is the end of the span, not its start
    about: bool  # the span begins half a cycle before the stamp
    by_cycle: bool  # the span is one cycle long, else at most max_age
    linear: bool  # the value runs straight to the next reading, else it stays
    why: str


RULES = {
    # From its sample on alone, what is held would lag half a cycle behind the flows it is multiplied with: in
    # hours with load moves 89 instead of 95 of 100 intervals of the conversion would hold the truth.
    "held": _Rule(False, True, False, False, "a result is true for its sample, and for what lies next to it"),
    "interpolated": _Rule(False, False, False, True, "compressed exports keep points where slopes change"),
    "mean at end": _Rule(True, False, True, False, "the mean of the interval that the stamp closes"),
    "mean at start": _Rule(False, False, True, False, "the mean of the interval that the stamp opens"),
    "lab sample": _Rule(
        False, False, False, False, "a result is valid from its sample on, however often shown"
    ),
}


@dataclass(frozen=True, slots=True)
class _Timing:
    """The times of one instrument in microseconds: how far a stamp is moved back, how long a value stands."""

    shift_us: int
    hold_us: int
    stale_us: int  # after the hold: stale for so long, missing from then on
    linear: bool


@dataclass(frozen=True, slots=True)
class _Grid:
    """The cells of one pass: start of the first, length, number."""

    first_us: int
    size_us: int
    count: int


@dataclass(frozen=True, slots=True)
class _Pieces:
    """Spans cut at the edges of cells: p pieces, each within one cell. Times in microseconds."""

    reading: Places  # (p,) whose span it is
    cell: Places  # (p,)
    length: Floats  # (p,) whole numbers, so that their sums are exact
    along: Floats  # (p,) how far the middle of the piece lies from this reading (0) to the next (1)
    linked: Flags  # (n,) the next reading comes before the span runs out
    covered: Floats  # (t,) time within spans
    stale: Floats  # (t,) time after the end of a span in which the signal is stale


def look_back(unit: Unit) -> timedelta:
    """Give how long before its start a cell can depend on readings: `reach` tells the other side.

    Readings that arrive for a time t can change the cells with t - reach < start <= t + look_back.

    Parameters
    ----------
    unit : Unit

    Returns
    -------
    timedelta
        Hold, then the time a silent signal counts as stale, then what the checks need to be sure.
    """
    needs = [
        (t.hold_us + t.stale_us) * _US + looks_back(unit, i) + _again(i)
        for i in unit.instruments
        if i.tag is not None
        for t in (_timing(i),)
    ]
    return max(needs, default=timedelta(0))


def reach(unit: Unit) -> timedelta:
    """Give how long after its start a cell can depend on readings.

    Parameters
    ----------
    unit : Unit

    Returns
    -------
    timedelta
        The cell, then dead time or interval, then the way to the next reading of an interpolated signal,
        then what the checks need to be sure.
    """
    needs = [
        (t.shift_us + t.linear * t.hold_us) * _US + looks_ahead(unit, i)
        for i in unit.instruments
        if i.tag is not None
        for t in (_timing(i),)
    ]
    return unit.cell + max(needs, default=timedelta(0))


def cell_starts(unit: Unit, first_us: int, last_us: int) -> Times:
    """Give the starts of the cells with first <= start < last.

    Parameters
    ----------
    unit : Unit
    first_us, last_us : int
        [us UTC]; need not lie on the grid, so neighbouring spans share no cell and leave none out.

    Returns
    -------
    array (t,) of int64
        [us UTC], whole multiples of the unit's cell since 1970-01-01T00:00Z.
    """
    size = unit.cell // _US
    return np.arange(-(-first_us // size) * size, last_us, size, dtype=np.int64)


def make_cells(
    unit: Unit, readings: Readings, first_us: int, last_us: int, *, carried: Carried | None = None
) -> Cells:
    """Average readings into the cells with first <= start < last.

    A cell does not depend on first and last, given readings from `look_back(unit)` before first to
    `reach(unit)` after last and `carried` from the cells before; readings further off are not used.
    A span is invalid where its reading, or for an interpolated signal either of its two, failed a check.
    Nothing is bridged: what the signal was in an invalid span is not known.

    Parameters
    ----------
    unit : Unit
        m instruments.
    readings : Readings
        Tags that no instrument bears change nothing; a tag without readings is missing.
    first_us, last_us : int
        [us UTC]
    carried : Carried, optional
        From `carried_after` the cells before; nothing is known without.

    Returns
    -------
    Cells
        A value is NaN where less than LEAST_SHARE of the cell was valid; the condition is then the one
        that cost most of its time. A cell of which LEAST_SHARE was suspect bears that condition and a
        value.
    """
    start = cell_starts(unit, first_us, last_us)
    grid = _Grid(int(start[0]) if start.size else first_us, unit.cell // _US, start.size)
    near = _near(unit, readings, grid)
    codes = screened(unit, near)
    shape = (len(unit.instruments), start.size)
    # One row per instrument while they are filled, so that each is written in one stroke.
    value, share, condition = np.empty(shape), np.ones(shape, np.float32), np.zeros(shape, np.int8)
    cut: dict[_Timing, tuple[Times, _Pieces]] = {}
    for at, instrument in enumerate(unit.instruments):
        if instrument.tag is None:
            value[at] = np.nan if instrument.value is None else instrument.value
        else:
            series = near[instrument.tag]
            pieces = _pieces_of(series.time, _timing(instrument), grid, cut)
            linear = RULES[instrument.sampling].linear
            value[at], share[at], condition[at] = _average(series, codes[at], pieces, grid, linear)
    operating = _operating(unit, value, start, carried or Carried())
    return Cells(start, value.T, share.T, condition.T, operating)


def operating_of(
    load: Floats, start: Times, operating: Operating, carried: Carried, *, votes: Sequence[Floats] = ()
) -> Codes:
    """Tell the operating condition of each cell from its load and from what votes beside it.

    Down below `down_below`, back only above `running_above`; between the two it stays what it was, over
    cells without load too. Before anything has told, a load between the two is not known. With votes, down
    and back are what most of the signals that are seen say; else, as in a tie, it stays what it was. A load
    that was outvoted tells no turn-down.

    Parameters
    ----------
    load : array (t,)
        In the load instrument's own unit; NaN is not known.
    start : array (t,) of int64
        Cell starts [us UTC].
    operating : Operating
    carried : Carried
        From the cells before.
    votes : sequence of arrays (t,)
        The signals of `operating.votes`, each in its own unit; NaN casts no vote.

    Returns
    -------
    array (t,) of int8
        Index into OPERATING. Not known (nothing seen, or nothing has told yet), then down, then starting,
        then turned down go before running.
    """
    fell, up, seen = majority(np.array([load, *votes]), voters(operating))
    down, known = _last_told(fell, up, carried.down)
    was_down = np.concatenate([[carried.down is True], down[:-1]])
    returned = np.where(up & was_down, start, -_NEVER)
    before = -_NEVER if carried.returned_us is None else carried.returned_us
    since = start - np.maximum(np.maximum.accumulate(returned), before)
    conditions = [
        ~(seen & known),
        down,
        since < operating.starting_for // _US,
        (load >= operating.down_below) & (load < operating.turned_down_below),
    ]
    codes = np.select(conditions, [NOT_KNOWN, DOWN, STARTING, TURNED_DOWN], RUNNING)
    return codes.astype(np.int8)


def carried_after(cells: Cells, carried: Carried | None = None) -> Carried:
    """Give what the cells that follow these need to know.

    Where it comes out as before after a change to these cells, the cells that follow stay as they are.

    Parameters
    ----------
    cells : Cells
    carried : Carried, optional
        What these cells were made with.

    Returns
    -------
    Carried
    """
    carried = carried or Carried()
    known = np.flatnonzero(cells.operating != NOT_KNOWN)
    if not known.size:
        return carried
    last = cells.operating[known[-1]]
    if last != STARTING:
        return Carried(down=bool(last == DOWN))
    downs = np.flatnonzero(cells.operating == DOWN)
    if not downs.size and carried.returned_us is not None:
        return Carried(False, carried.returned_us)
    after = cells.operating[downs[-1] + 1 if downs.size else 0 :]
    return Carried(False, int(cells.start[cells.start.size - after.size + np.argmax(after == STARTING)]))


def cells_frame(unit: Unit, cells: Cells) -> pd.DataFrame:
    """Lay cells out as a frame to be stored or looked at.

    Parameters
    ----------
    unit : Unit
        m instruments.
    cells : Cells

    Returns
    -------
    DataFrame
        Index `start` (UTC); columns `value <name>`, `share <name>`, `condition <name>` for each instrument,
        `sum <name>` for each analyzer that states a band for the raw sum of its channels,
        and `operating`. Codes stay codes.
    """
    columns: dict[str, NDArray[np.generic]] = {}
    for at, instrument in enumerate(unit.instruments):
        columns[f"value {instrument.name}"] = cells.value[:, at]
        columns[f"share {instrument.name}"] = cells.share[:, at]
        columns[f"condition {instrument.name}"] = cells.condition[:, at]
    columns |= {f"sum {name}": total for name, total in sums(unit, cells.value).items()}
    columns["operating"] = cells.operating
    index = pd.DatetimeIndex(cells.start.astype("datetime64[us]"), name="start").tz_localize("UTC")
    return pd.DataFrame(columns, index=index)


def cells_from_frame(unit: Unit, frame: pd.DataFrame) -> Cells:
    """Take cells back from the frame that `cells_frame` made.

    Parameters
    ----------
    unit : Unit
        The one the cells were made for; columns of other instruments are left alone.
    frame : DataFrame

    Returns
    -------
    Cells

    Raises
    ------
    StoreError
        An instrument of the unit has no column.
    """
    names = [i.name for i in unit.instruments]
    lacking = [name for name in names if f"value {name}" not in frame]
    if lacking:
        raise StoreError(
            f"cells of {unit.key}: no column for {', '.join(lacking)}",
            remedy="Make the cells of this time again: the unit file has changed since they were written.",
        )

    return Cells(
        start=pd.DatetimeIndex(frame.index).as_unit("us").asi8,
        value=_matrix(frame, "value", names).astype(np.float64),
        share=_matrix(frame, "share", names).astype(np.float32),
        condition=_matrix(frame, "condition", names).astype(np.int8),
        operating=frame["operating"].to_numpy(np.int8),
    )


def _matrix(frame: pd.DataFrame, field: str, names: list[str]) -> NDArray[Any]:
    """The columns of one field, one matrix column per instrument."""
    return np.array([frame[f"{field} {name}"].to_numpy() for name in names]).reshape(len(names), -1).T


def _timing(instrument: Instrument) -> _Timing:
    """The instrument's times by the rule of its sampling."""
    rule = RULES[instrument.sampling]
    before = instrument.cycle / 2 if rule.about else timedelta(0)  # a result's age counts from its sample
    shift = instrument.dead_time + before + (instrument.cycle if rule.ends else timedelta(0))
    hold = instrument.cycle if rule.by_cycle else instrument.max_age + before
    return _Timing(shift // _US, hold // _US, instrument.max_age // _US, rule.linear)


def _near(unit: Unit, readings: Readings, grid: _Grid) -> Readings:
    """The readings that can have a part in the cells of the grid, for every tag of the unit."""
    first = grid.first_us - look_back(unit) // _US
    last = grid.first_us + (grid.count - 1) * grid.size_us + reach(unit) // _US
    near = {}
    for tag in {i.tag for i in unit.instruments if i.tag is not None}:
        series = readings.get(tag) or empty()
        begin, end = np.searchsorted(series.time, [first, last])
        near[tag] = series.take(slice(begin, end))
    for one in unit.instruments:
        if one.tag is not None and one.sampling == LAB:
            near[one.tag] = _results(near[one.tag], _again(one))
    return near


def _again(instrument: Instrument) -> timedelta:
    """How soon after it the same value is the same lab result, shown once more; none for other samplings."""
    return instrument.cycle / 2 if instrument.sampling == LAB else timedelta(0)


def _results(series: Series, again: timedelta) -> Series:
    """The results of a lab, each once: an export repeats the last one, or writes words until the next."""
    told = series.take((np.abs(series.value) < LARGEST) & (series.quality != BAD))
    shown = (np.diff(told.value) == 0) & (np.diff(told.time) < again // _US)
    return told.take(np.concatenate([[True], ~shown])[: len(told)])


def _pieces_of(
    time: Times, timing: _Timing, grid: _Grid, cut: dict[_Timing, tuple[Times, _Pieces]]
) -> _Pieces:
    """The pieces for these stamps; the tags of one export mostly share them, and cutting is the dear part."""
    last = cut.get(timing)
    if last is None or not np.array_equal(last[0], time):
        last = cut[timing] = time, _cut_spans(time, timing, grid)
    return last[1]


def _cut_spans(time: Times, timing: _Timing, grid: _Grid) -> _Pieces:
    """Give each reading its span and cut the spans at the edges of the cells."""
    begin = time - timing.shift_us
    following = _next(begin, _NEVER)
    end = np.minimum(following, begin + timing.hold_us)
    reading, cell, left, right = _cut(begin, end, grid)
    length = (right - left).astype(np.float64)
    middle = (left - begin[reading]) + length / 2
    along = middle / (end - begin)[reading] if timing.linear else np.zeros(0)
    covered = _summed(cell, length, grid)
    _, late, silent, heard = _cut(end, np.minimum(following, end + timing.stale_us), grid)
    stale = _summed(late, (heard - silent).astype(np.float64), grid)
    return _Pieces(reading, cell, length, along, end == following, covered, stale)


def _summed(cell: Places, weight: Floats, grid: _Grid) -> Floats:
    """Add up what falls into each cell, in the order of time."""
    return np.bincount(cell, weight, grid.count).astype(np.float64, copy=False)


def _cut(begin: Times, end: Times, grid: _Grid) -> tuple[Places, Places, Times, Times]:
    """Cut spans at the edges of cells: which span, which cell, from, to. Off the grid is left out."""
    first, size = grid.first_us, grid.size_us
    left, right = np.maximum(begin, first), np.minimum(end, first + grid.count * size)
    span = np.flatnonzero(right > left)
    left, right = left[span], right[span]
    cell = (left - first) // size
    times = (right - 1 - first) // size - cell + 1
    if (times > 1).any():
        nth = np.arange(times.sum()) - np.repeat(np.cumsum(times) - times, times)
        span, cell = np.repeat(span, times), np.repeat(cell, times) + nth
        edge = first + cell * size
        left = np.maximum(np.repeat(left, times), edge)
        right = np.minimum(np.repeat(right, times), edge + size)
    return span, cell, left, right


def _average(
    series: Series, codes: Codes, pieces: _Pieces, grid: _Grid, linear: bool
) -> tuple[Floats, Floats, Codes]:
    """Mean, valid share and condition of every cell for one instrument."""
    taken = takes_part(codes)
    doubts, codes = np.where(taken, codes, GOOD), np.where(taken, GOOD, codes)
    codes, here, change = _spans(series.value, codes, pieces.linked, linear)
    signal = here[pieces.reading]
    if linear:
        signal += change[pieces.reading] * pieces.along
    signal *= pieces.length
    total = _summed(pieces.cell, signal, grid)
    refused = np.flatnonzero(codes[pieces.reading])
    lost = pieces.cell[refused], pieces.length[refused], codes[pieces.reading[refused]]
    valid = pieces.covered - _summed(lost[0], lost[1], grid)
    condition = np.zeros(grid.count, dtype=np.int8)
    poor = np.flatnonzero(valid < LEAST_SHARE * grid.size_us)
    condition[poor] = _dearest(poor, pieces, grid, lost)
    condition = np.where(condition == GOOD, _doubted(doubts, pieces, grid), condition)
    value = np.full(grid.count, np.nan)
    np.divide(total, valid, out=value, where=takes_part(condition))
    return value, valid / grid.size_us, condition


def _doubted(doubts: Codes, pieces: _Pieces, grid: _Grid) -> Codes:
    """The suspect condition that most of a cell was in; good where there is none."""
    found = np.full(grid.count, GOOD, dtype=np.int8)
    for code in SUSPECTS if doubts.any() else ():
        mine = np.flatnonzero(doubts[pieces.reading] == code)
        time = _summed(pieces.cell[mine], pieces.length[mine], grid)
        found[time >= LEAST_SHARE * grid.size_us] = code
    return found


def _spans(value: Floats, codes: Codes, linked: Flags, linear: bool) -> tuple[Codes, Floats, Floats]:
    """Condition of each reading's span, the value at its begin and the change over it (0 where refused)."""
    if not linear:
        return codes, np.where(codes == GOOD, value, 0.0), np.zeros(0)
    after = _next(codes, STALE)
    # A straight line needs both its ends: the last reading before a long gap tells nothing about the gap.
    span = np.where(codes != GOOD, codes, np.where(linked, after, np.int8(STALE)))
    here = np.where(span == GOOD, value, 0.0)
    return span, here, np.where(span == GOOD, _next(value, 0.0), 0.0) - here


def _next(of: NDArray[Any], last: float) -> NDArray[Any]:
    """What comes after each entry, and `last` after the last."""
    following = np.roll(of, -1)
    following[-1:] = last
    return following


def _dearest(
    poor: Places,
    pieces: _Pieces,
    grid: _Grid,
    lost: tuple[Places, Floats, Codes],
) -> Places:
    """Which condition cost each poor cell most of its time."""
    cell, length, code = lost
    cost = np.zeros((len(CONDITIONS), poor.size))
    for refused in np.unique(code):
        mine = code == refused
        cost[refused] = _summed(cell[mine], length[mine], grid)[poor]
    cost[STALE] += pieces.stale[poor]
    cost[MISSING] = grid.size_us - pieces.covered[poor] - pieces.stale[poor]
    dearest: Places = cost.argmax(axis=0)
    return dearest


def _operating(unit: Unit, value: Floats, start: Times, carried: Carried) -> Codes:
    """The operating condition from the rows of load and votes; running throughout where no rule is stated."""
    if unit.operating is None:
        return np.full(start.size, RUNNING, dtype=np.int8)
    names = [i.name for i in unit.instruments]
    load, *votes = (value[names.index(vote.instrument)] for vote in voters(unit.operating))
    return operating_of(load, start, unit.operating, carried, votes=votes)


def _last_told(down: Flags, up: Flags, before: bool | None) -> tuple[Flags, Flags]:
    """Carry the last cell that told forward: was it down, and has anything told at all."""
    told = np.maximum.accumulate(np.where(down | up, np.arange(down.size), -1))
    return np.where(told >= 0, down[told], before is True), (told >= 0) | (before is not None)
