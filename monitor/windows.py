"""Judged figures over rolling windows and calendar spans: value, half-width, coverage, reason when missing.

A window figure is a ratio of sums over the cells of the window, never a mean of ratios. A cell counts for a
figure when every amount with a weight in it is seen. Coverage is the share of the window's running time
that counts; cells the record does not hold are running time not covered. Sources: GUM JCGM 100:2008, 5.1
and 5.2 (propagation, correlated inputs); the rule for held results is the project's own.
"""

from __future__ import annotations

import itertools
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from datetime import timedelta
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from ingest.unit import Unit
from monitor.amounts import Amounts
from monitor.figures import Figure, quotient
from monitor.sums import Functionals, Total, functionals, rolling
from monitor.tallies import Sums, Tally, tally

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]

MODES = ("as operated", "steady")
REASONS = (
    "",
    "too little coverage",
    "too little made to tell",
    "cannot be seen",
    "not running",
    "balance did not solve",
)
THIN, DOUBTFUL, UNSEEN, IDLE, UNSOLVED = range(1, len(REASONS))
FIELDS = ("value", "half_width", "coverage", "reason")
SPAN_FIELDS = (*FIELDS, "numerator", "denominator")

# Every figure in both modes over some spans: field -> (f, 2, rows).
Judged = dict[str, NDArray[Any]]

LEAST_RUNNING = 0.1  # share of a span that must be running time of the mode, else "not running"
TWO_SIDED_95 = 1.959963984540054  # standard normal quantile at 0.975
HOUR = timedelta(hours=1)
CHUNK = 4096  # cells in one go; the sums of a chunk then stay within some tens of MB


@dataclass(frozen=True, slots=True)
class _Spans:
    """How to add tallies up, and how many cells each sum should hold: (rows,) or (1,) per total."""

    total: Total
    slots: tuple[NDArray[np.int64], ...]


@dataclass(frozen=True, slots=True)
class _Running:
    """Cells of one mode in some spans, (rows,) each."""

    needed: NDArray[np.int64]  # running time of the mode, whether seen or not
    told: NDArray[np.int32]  # of these, with any amount seen
    unsolved: NDArray[np.int32]  # of these, without a converged balance
    slots: NDArray[np.int64]  # all cells the span should hold


@dataclass(frozen=True, slots=True)
class _Job:
    """What stays the same for every chunk of one call."""

    figures: tuple[Figure, ...]
    plan: Functionals
    cell: timedelta
    least_coverage: float


def window_figures(
    unit: Unit,
    amounts: Amounts,
    figures: Sequence[Figure],
    *,
    since_us: int | None = None,
    unsolved: Mask | None = None,
) -> dict[timedelta, pd.DataFrame]:
    """Every figure over every window of the unit, at the end of each cell, as frames.

    Parameters
    ----------
    unit : Unit
    amounts : Amounts
    figures : sequence of Figure
    since_us : int, optional
    unsolved : ndarray of bool, shape (t,), optional
        All as in `judged_windows`.

    Returns
    -------
    dict of timedelta to DataFrame
        Index `end`: window ends [UTC]. Columns (figure, mode, field), as in `judged_windows`.
    """
    ends_us, judged = judged_windows(unit, amounts, figures, since_us=since_us, unsolved=unsolved)
    ends = _utc(ends_us, "end")
    return {window: _frame(figures, one, ends) for window, one in judged.items()}


def judged_windows(
    unit: Unit,
    amounts: Amounts,
    figures: Sequence[Figure],
    *,
    since_us: int | None = None,
    unsolved: Mask | None = None,
) -> tuple[NDArray[np.int64], dict[timedelta, Judged]]:
    """Every figure over every window of the unit, at the end of each cell.

    The result for a cell depends on the cells of its longest window only: given those, any chunk gives
    the same bits. Memory beyond the result stays within some tens of MB.

    Parameters
    ----------
    unit : Unit
        Gives windows, cell and least coverage.
    amounts : Amounts
        On one grid without holes; to go on with a record, begin one longest window before `since_us`.
    figures : sequence of Figure
        On the axis `amounts.names`.
    since_us : int, optional
        First cell start that gets a row [us UTC]; all cells if not given.
    unsolved : ndarray of bool, shape (t,), optional
        Cells whose balance did not converge; only the reason depends on it.

    Returns
    -------
    ends_us : ndarray of int64, shape (rows,)
        Window ends [us UTC].
    judged : dict of timedelta to dict of str to ndarray
        Each field of `FIELDS` as an array (figures, modes as in `MODES`, rows); value and half_width (95 %)
        in the figure's unit, NaN where `reason`, an index into `REASONS`, is not 0; coverage 0 to 1, NaN
        without running time.
    """
    first = 0 if since_us is None else int(np.searchsorted(amounts.start, since_us))
    longest, count = max(max(1, round(window / unit.cell)) for window in unit.windows), len(amounts.start)
    parts = []
    for carried, begin, end in _chunks(first, count, longest):
        held = tally(functionals(figures), *_on_grid(unit, amounts, unsolved), np.arange(carried, end + 1))
        parts.append(rolled(unit, figures, [held], skip=begin - carried, step=unit.cell))
    judged = {window: _joined([part[window] for part in parts], figures) for window in unit.windows}
    return amounts.start[first:] + unit.cell // timedelta(microseconds=1), judged


def rolled(
    unit: Unit, figures: Sequence[Figure], tallies: Sequence[Tally], *, skip: int, step: timedelta
) -> dict[timedelta, Judged]:
    """Every figure over every window of the unit, at the end of each span of some tallies.

    Parameters
    ----------
    unit : Unit
        Gives windows, cell and least coverage.
    figures : sequence of Figure
        Those that the tallies are of.
    tallies : sequence of Tally
        One after the other without holes, of b spans in all, each as long as `step`.
    skip : int
        Spans at the front that only serve the windows of later ones.
    step : timedelta
        Divides every window.

    Returns
    -------
    dict of timedelta to dict of str to ndarray
        As in `judged_windows`, with b - skip rows.
    """
    job = _Job(tuple(figures), functionals(figures), unit.cell, unit.least_coverage)
    lengths = [max(1, round(window / step)) for window in unit.windows]
    slots = tuple(np.array([length * round(step / unit.cell)]) for length in lengths)
    rows = sum(one.idle.shape[1] for one in tallies) - skip
    judged = [_room(len(job.figures), rows, FIELDS) for _ in lengths]
    _judge(job, tallies, _Spans(rolling(lengths, skip), slots), judged)
    return dict(zip(unit.windows, judged, strict=True))


def span_figures(
    unit: Unit,
    amounts: Amounts,
    figures: Sequence[Figure],
    edges_us: NDArray[np.int64],
    *,
    unsolved: Mask | None = None,
) -> pd.DataFrame:
    """Every figure over spans that follow one another, judged as windows are.

    Parameters
    ----------
    unit : Unit
        Gives cell and least coverage.
    amounts : Amounts
        On one grid without holes.
    figures : sequence of Figure
        On the axis `amounts.names`.
    edges_us : ndarray of int64, shape (n + 1,)
        Ascending edges [us UTC]; a cell belongs to the span its start lies in.
    unsolved : ndarray of bool, shape (t,), optional
        Cells whose balance did not converge; only the reason depends on it.

    Returns
    -------
    DataFrame
        Index `start`: span starts [UTC]. Columns (figure, mode, field), field as in `SPAN_FIELDS`.
        Numerator and denominator are the sums over the cells that count, whatever the reason [kmol; of a
        make t and h].
    """
    judged = _spanned(unit, amounts, figures, edges_us, unsolved)
    return _frame(figures, judged, _utc(edges_us[:-1], "start"))


def window_at(
    unit: Unit, amounts: Amounts, figures: Sequence[Figure], first_us: int, last_us: int
) -> pd.DataFrame:
    """Every figure over one span of any length.

    Parameters
    ----------
    unit : Unit
        Gives cell and least coverage.
    amounts : Amounts
        On one grid without holes.
    figures : sequence of Figure
        On the axis `amounts.names`.
    first_us, last_us : int
        The span [us UTC]; a cell belongs to it when its start does.

    Returns
    -------
    DataFrame
        Index (figure, mode), columns `SPAN_FIELDS` as in `span_figures`.
    """
    edges_us = np.array([first_us, last_us], dtype=np.int64)
    judged = _spanned(unit, amounts, figures, edges_us, None)
    index = pd.MultiIndex.from_product([[one.name for one in figures], MODES], names=["figure", "mode"])
    return pd.DataFrame({field: judged[field].ravel() for field in SPAN_FIELDS}, index=index)


def calendar_days(
    unit: Unit, amounts: Amounts, figures: Sequence[Figure], *, unsolved: Mask | None = None
) -> pd.DataFrame:
    """Every figure over the days of the unit's own calendar, of 23 to 25 hours.

    Parameters
    ----------
    unit : Unit
        Gives time zone, cell and least coverage.
    amounts : Amounts
        On one grid without holes. First and last day may be there in part: their coverage says so.
    figures : sequence of Figure
        On the axis `amounts.names`.
    unsolved : ndarray of bool, shape (t,), optional
        Cells whose balance did not converge; only the reason depends on it.

    Returns
    -------
    DataFrame
        As `span_figures`, index `day`: the day's first instant in the unit's time zone.
    """
    if not len(amounts.start):
        edges = np.zeros(1, dtype=np.int64)
    else:
        edges = local_midnights(unit.time_zone, int(amounts.start[0]), int(amounts.start[-1]))
    frame = span_figures(unit, amounts, figures, edges, unsolved=unsolved)
    return frame.tz_convert(unit.time_zone).rename_axis(index="day")


def local_midnights(time_zone: str, first_us: int, last_us: int) -> NDArray[np.int64]:
    """Give the first instants of the local days from that of `first_us` to the one after `last_us`.

    Parameters
    ----------
    time_zone : str
        IANA name.
    first_us, last_us : int
        Instants [us UTC].

    Returns
    -------
    ndarray of int64, shape (days + 1,)
        [us UTC]. Where the clock skips midnight the day begins when it goes on; where midnight comes
        twice, at the first.
    """
    local = _utc(np.array([first_us, last_us]), None).tz_convert(time_zone).tz_localize(None).normalize()
    days = pd.date_range(local[0], local[1] + pd.Timedelta(days=1), freq="D")
    instants = days.tz_localize(
        time_zone, nonexistent="shift_forward", ambiguous=np.ones(len(days), dtype=bool)
    )
    return instants.tz_convert("UTC").tz_localize(None).to_numpy("datetime64[us]").astype(np.int64)


def _on_grid(unit: Unit, amounts: Amounts, unsolved: Mask | None) -> tuple[Amounts, Mask]:
    """Check the grid; without word on them all cells converged."""
    if (np.diff(amounts.start) != unit.cell // timedelta(microseconds=1)).any():
        msg = "amounts must lie on one grid of the unit's cells, without holes"
        raise ValueError(msg)
    return amounts, np.zeros(len(amounts.start), dtype=bool) if unsolved is None else unsolved


def _chunks(first: int, count: int, longest: int) -> Iterator[tuple[int, int, int]]:
    """Give (first cell with a window behind it, first cell with a row, end) of each chunk."""
    size = max(CHUNK, longest)
    for begin in range(first, count, size):
        yield max(0, begin - longest + 1), begin, min(begin + size, count)


def _spanned(
    unit: Unit,
    amounts: Amounts,
    figures: Sequence[Figure],
    edges_us: NDArray[np.int64],
    unsolved: Mask | None,
) -> Judged:
    """Judge the spans between edges, many short ones in one go."""
    job = _Job(tuple(figures), functionals(figures), unit.cell, unit.least_coverage)
    amounts, unsolved = _on_grid(unit, amounts, unsolved)
    slots = np.round(np.diff(edges_us) / (unit.cell // timedelta(microseconds=1))).astype(np.int64)
    places = np.searchsorted(amounts.start, edges_us)
    judged = _room(len(job.figures), len(slots), SPAN_FIELDS)
    cuts = np.flatnonzero(np.diff(places[:-1] // CHUNK)) + 1
    for a, z in itertools.pairwise([0, *cuts.tolist(), len(slots)]):
        held = tally(job.plan, amounts, unsolved, places[a : z + 1])
        spans = _Spans(lambda values: [values], (slots[a:z],))
        _judge(job, [held], spans, [_part(judged, slice(a, z))])
    return judged


def _judge(job: _Job, tallies: Sequence[Tally], spans: _Spans, out: list[Judged]) -> None:
    """Judge all figures over the spans of some tallies into `out`, one entry per entry of the total."""
    times = [_running(tallies, mode, spans) for mode in range(len(MODES))]
    held_cells = np.array([hold / job.cell for hold in tallies[0].hold])
    for users in _alike(tallies):
        for place, sums in enumerate(_summed(job, tallies, users, held_cells, spans)):
            for f, m in users:
                _enter(job, out[place], (f, m), sums, times[m][place])


def _alike(tallies: Sequence[Tally]) -> list[list[tuple[int, int]]]:
    """Group (figure, mode) that share their sums in every tally."""
    groups: dict[tuple[int, ...], list[tuple[int, int]]] = {}
    for f, m in np.ndindex(tallies[0].group.shape):
        groups.setdefault(tuple(int(one.group[f, m]) for one in tallies), []).append((f, m))
    return list(groups.values())


def _running(tallies: Sequence[Tally], mode: int, spans: _Spans) -> list[_Running]:
    """Count the cells of one mode; what the record does not hold counts as running."""
    idle, told, unsolved = (
        spans.total(np.concatenate([getattr(one, name)[mode] for one in tallies]))
        for name in ("idle", "told", "unsolved")
    )
    return [
        _Running(slots - idle[place], told[place], unsolved[place], slots)
        for place, slots in enumerate(spans.slots)
    ]


def _summed(
    job: _Job, tallies: Sequence[Tally], users: list[tuple[int, int]], held_cells: Array, spans: _Spans
) -> list[Sums]:
    """Sum over the cells that count what the figures that use them are made of."""
    mine = [one.sums[one.group[users[0]]] for one in tallies]
    figures = [f for f, _ in users]
    top, bottom = (side[figures].tolist() for side in (job.plan.top, job.plan.bottom))
    ratios = {pair for n, d in zip(top, bottom, strict=True) for pair in ((n, n), (n, d), (d, d))}
    count = spans.total(np.concatenate([one.count for one in mine]))
    linear = {
        k: spans.total(np.concatenate([one.linear[k] for one in mine], axis=-1))
        for k in {*top, *bottom} - {-1}
    }
    spread = {
        pair: spans.total(np.concatenate([one.spread[pair] for one in mine], axis=-1))
        for pair in ratios & set(job.plan.pairs)
    }
    # A result held longer than a cell counts once in its hold, never more often than once in the window.
    repeats = [np.minimum(held_cells[:, None], slots) for slots in spans.slots]
    return [
        Sums(
            count[place],
            {k: one[place] for k, one in linear.items()},
            {pair: (repeat * one[place]).sum(axis=0) for pair, one in spread.items()},
        )
        for place, repeat in enumerate(repeats)
    ]


def _enter(job: _Job, out: Judged, at: tuple[int, int], sums: Sums, time: _Running) -> None:
    """Write one figure in one mode over one window length."""
    scale, n, d = job.figures[at[0]].scale, int(job.plan.top[at[0]]), int(job.plan.bottom[at[0]])
    top = sums.linear[n][0]
    if d < 0:
        bottom = (sums.count * (job.cell / HOUR)).astype(np.float64)
        value, by_top, _ = quotient(top, bottom, scale)
        variance, doubtful, top = (
            by_top**2 * _own_variance(sums, n),
            np.zeros(len(top), dtype=bool),
            scale * top,
        )
    else:
        bottom = sums.linear[d][0]
        value, variance = _ratio(sums, n, d, scale)
        doubtful = np.isnan(value) | (np.abs(bottom) < 2 * np.sqrt(_own_variance(sums, d)))
    reason = _reason(time, sums.count, doubtful, job.least_coverage)
    told = {
        "value": np.where(reason == 0, value, np.nan),
        "half_width": np.where(reason == 0, TWO_SIDED_95 * np.sqrt(variance), np.nan),
        "coverage": sums.count / np.where(time.needed > 0, time.needed, np.nan),
        "reason": reason,
        "numerator": top,
        "denominator": bottom,
    }
    for field, room in out.items():
        room[at] = told[field]


def _ratio(sums: Sums, n: int, d: int, scale: float) -> tuple[Array, Array]:
    """Value and variance of a ratio: systematic responses add before squaring, random ones after."""
    value, by_top, by_bottom = quotient(sums.linear[n][0], sums.linear[d][0], scale)
    response = by_top * sums.linear[n][1:]
    response += by_bottom * sums.linear[d][1:]
    random = (
        by_top**2 * sums.spread[n, n]
        + 2 * by_top * by_bottom * sums.spread[n, d]
        + by_bottom**2 * sums.spread[d, d]
    )
    # Rounding may leave a hair below 0 where the errors cancel in the ratio.
    return value, np.maximum(random, 0.0) + np.einsum("sr,sr->r", response, response)


def _own_variance(sums: Sums, k: int) -> Array:
    """Variance of one functional [kmol2]."""
    response = sums.linear[k][1:]
    return np.asarray(sums.spread[k, k] + np.einsum("sr,sr->r", response, response))


def _reason(
    time: _Running, count: NDArray[np.int32], doubtful: Mask, least_coverage: float
) -> NDArray[np.int8]:
    """Why a figure is missing, 0 if it is not; of several reasons the one that explains the others."""
    lacking = time.needed - count
    thin = (count < least_coverage * time.needed) | (count == 0)
    reason = np.where(doubtful, DOUBTFUL, 0).astype(np.int8)
    reason[thin] = THIN
    reason[thin & (2 * (time.told - count) > lacking)] = UNSEEN
    reason[thin & (2 * time.unsolved > lacking)] = UNSOLVED
    reason[time.needed < np.maximum(1, LEAST_RUNNING * time.slots)] = IDLE
    return reason


def _room(figures: int, rows: int, shown: tuple[str, ...]) -> Judged:
    """Room for the figures over some spans."""
    shape = (figures, len(MODES), rows)
    return {field: np.empty(shape, np.int8 if field == "reason" else np.float64) for field in shown}


def _part(judged: Judged, rows: slice) -> Judged:
    """Give the room of some rows."""
    return {field: room[:, :, rows] for field, room in judged.items()}


def _joined(parts: Sequence[Judged], figures: Sequence[Figure]) -> Judged:
    """Put the rows of some chunks one after the other."""
    none = _room(len(figures), 0, FIELDS)
    return {
        field: np.concatenate([none[field], *(part[field] for part in parts)], axis=2) for field in FIELDS
    }


def _frame(figures: Sequence[Figure], judged: Judged, index: pd.DatetimeIndex) -> pd.DataFrame:
    """Lay figures out as columns (figure, mode, field)."""
    columns = [room[f, m] for f in range(len(figures)) for m in range(len(MODES)) for room in judged.values()]
    # Stacking the columns by kind, as pandas does with a copy, would cost a third of the whole time.
    frame = pd.DataFrame(dict(enumerate(columns)), index=index, copy=False)
    frame.columns = _product([one.name for one in figures], tuple(judged))
    return frame


def _product(names: list[str], fields: tuple[str, ...]) -> pd.MultiIndex:
    """Columns in the order of the table of figures; built by codes, since pandas would sort the levels."""
    shape = (len(names), len(MODES), len(fields))
    codes = [axis.ravel() for axis in np.indices(shape)]
    return pd.MultiIndex([names, MODES, fields], codes, names=["figure", "mode", "field"])


def _utc(time_us: NDArray[np.int64], name: str | None) -> pd.DatetimeIndex:
    """Give instants as a tz-aware index."""
    return pd.DatetimeIndex(time_us.astype("datetime64[us]"), name=name).tz_localize("UTC")
