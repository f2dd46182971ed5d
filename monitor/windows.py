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

from ingest.cells import DOWN, RUNNING
from ingest.unit import Unit
from monitor.amounts import Amounts
from monitor.figures import Figure, quotient
from monitor.sums import CellTerms, Functionals, Total, between, cell_terms, functionals, rolling

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
CHUNK = 4096  # cells in one go; the sums of a chunk then stay within some tens of MB


@dataclass(frozen=True, slots=True)
class _Spans:
    """How to sum, and how many cells each sum should hold: (rows,) or (1,) per entry of the total."""

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
class _Sums:
    """Sums over the cells that count, for one set of spans."""

    count: NDArray[np.int32]  # (rows,)
    linear: dict[int, Array]  # functional: (1 + s, rows) [kmol]
    spread: dict[tuple[int, int], Array]  # pair: random covariance (rows,) [kmol2]


@dataclass(frozen=True, slots=True)
class _Job:
    """What stays the same for every chunk of one call."""

    figures: tuple[Figure, ...]
    plan: Functionals
    amounts: Amounts
    unsolved: Mask
    cell_h: float
    held_cells: Array  # (c,)
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
    job = _job(unit, amounts, figures, unsolved)
    lengths = [max(1, round(window / unit.cell)) for window in unit.windows]
    first = 0 if since_us is None else int(np.searchsorted(amounts.start, since_us))
    judged = [_room(job, len(amounts.start) - first, FIELDS) for _ in lengths]
    for carried, begin, end in _chunks(first, len(amounts.start), max(lengths)):
        spans = _Spans(rolling(lengths, begin - carried), tuple(np.array([one]) for one in lengths))
        rows = slice(begin - first, end - first)
        _judge(job, slice(carried, end), spans, [_part(one, rows) for one in judged])
    ends_us = amounts.start[first:] + unit.cell // timedelta(microseconds=1)
    return ends_us, dict(zip(unit.windows, judged, strict=True))


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
    job = _job(unit, amounts, figures, unsolved)
    return _frame(figures, _spanned(job, edges_us), _utc(edges_us[:-1], "start"))


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
    job = _job(unit, amounts, figures, None)
    judged = _spanned(job, np.array([first_us, last_us], dtype=np.int64))
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


def _job(unit: Unit, amounts: Amounts, figures: Sequence[Figure], unsolved: Mask | None) -> _Job:
    """Check the grid and prepare what every chunk shares."""
    if (np.diff(amounts.start) != unit.cell // timedelta(microseconds=1)).any():
        msg = "amounts must lie on one grid of the unit's cells, without holes"
        raise ValueError(msg)
    return _Job(
        figures=tuple(figures),
        plan=functionals(figures),
        amounts=amounts,
        unsolved=np.zeros(len(amounts.start), dtype=bool) if unsolved is None else unsolved,
        cell_h=unit.cell / timedelta(hours=1),
        held_cells=np.array([hold / unit.cell for hold in amounts.hold]),
        least_coverage=unit.least_coverage,
    )


def _chunks(first: int, count: int, longest: int) -> Iterator[tuple[int, int, int]]:
    """Give (first cell with a window behind it, first cell with a row, end) of each chunk."""
    size = max(CHUNK, longest)
    for begin in range(first, count, size):
        yield max(0, begin - longest + 1), begin, min(begin + size, count)


def _spanned(job: _Job, edges_us: NDArray[np.int64]) -> Judged:
    """Judge the spans between edges, many short ones in one go."""
    slots = np.round(np.diff(edges_us) / (job.cell_h * 3.6e9)).astype(np.int64)
    places = np.searchsorted(job.amounts.start, edges_us)
    judged = _room(job, len(slots), SPAN_FIELDS)
    cuts = np.flatnonzero(np.diff(places[:-1] // CHUNK)) + 1
    for a, z in itertools.pairwise([0, *cuts.tolist(), len(slots)]):
        rows = slice(int(places[a]), int(places[z]))
        spans = _Spans(between(places[a : z + 1] - rows.start), (slots[a:z],))
        _judge(job, rows, spans, [_part(judged, slice(a, z))])
    return judged


def _judge(job: _Job, rows: slice, spans: _Spans, out: list[Judged]) -> None:
    """Judge all figures over the spans of some cells into `out`, one entry per entry of the total."""
    terms = cell_terms(job.plan, job.amounts, rows)
    operating = job.amounts.operating[rows]
    modes = (operating != DOWN, operating == RUNNING)
    told = np.asarray(terms.seen.any(axis=1))
    times = [_running(mode, told, job.unsolved[rows], spans) for mode in modes]
    for mask, users in _by_mask(job.plan, terms.seen, modes):
        for place, sums in enumerate(_summed(job, terms, mask, [f for f, _ in users], spans)):
            for f, m in users:
                _enter(job, out[place], (f, m), sums, times[m][place])


def _running(mode: Mask, told: Mask, unsolved: Mask, spans: _Spans) -> list[_Running]:
    """Count the cells of one mode; what the record does not hold counts as running."""
    idle, told_in, unsolved_in = (
        spans.total(one.astype(np.int32)) for one in (~mode, mode & told, mode & unsolved)
    )
    return [
        _Running(slots - idle[place], told_in[place], unsolved_in[place], slots)
        for place, slots in enumerate(spans.slots)
    ]


def _by_mask(
    plan: Functionals, seen: Mask, modes: tuple[Mask, ...]
) -> list[tuple[Mask, list[tuple[int, int]]]]:
    """Group (figure, mode) by the cells that count for them, so that equal ones are summed once."""
    groups: dict[bytes, tuple[Mask, list[tuple[int, int]]]] = {}
    for f, needs in enumerate(plan.needs):
        whole = seen[:, needs].all(axis=1)
        for m, mode in enumerate(modes):
            counts = whole & mode
            groups.setdefault(counts.tobytes(), (counts, []))[1].append((f, m))
    return list(groups.values())


def _summed(job: _Job, terms: CellTerms, mask: Mask, users: list[int], spans: _Spans) -> list[_Sums]:
    """Sum over the cells that count what the figures that use them are made of."""
    top, bottom = job.plan.top[users], job.plan.bottom[users]
    used = {int(k) for k in (*top, *bottom) if k >= 0}
    ratios = {pair for n, d in zip(top, bottom, strict=True) for pair in ((n, n), (n, d), (d, d))}
    count = spans.total(mask.astype(np.int32))
    linear = {k: spans.total(terms.linear[k] * mask) for k in used}
    spread = {
        pair: spans.total(terms.covariance[q] * mask)
        for q, pair in enumerate(job.plan.pairs)
        if pair in ratios
    }
    # A result held longer than a cell counts once in its hold, never more often than once in the window.
    repeats = [np.minimum(job.held_cells[:, None], slots) for slots in spans.slots]
    return [
        _Sums(
            count[place],
            {k: one[place] for k, one in linear.items()},
            {pair: (repeat * one[place]).sum(axis=0) for pair, one in spread.items()},
        )
        for place, repeat in enumerate(repeats)
    ]


def _enter(job: _Job, out: Judged, at: tuple[int, int], sums: _Sums, time: _Running) -> None:
    """Write one figure in one mode over one window length."""
    scale, n, d = job.figures[at[0]].scale, int(job.plan.top[at[0]]), int(job.plan.bottom[at[0]])
    top = sums.linear[n][0]
    if d < 0:
        bottom = (sums.count * job.cell_h).astype(np.float64)
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


def _ratio(sums: _Sums, n: int, d: int, scale: float) -> tuple[Array, Array]:
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


def _own_variance(sums: _Sums, k: int) -> Array:
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


def _room(job: _Job, rows: int, shown: tuple[str, ...]) -> Judged:
    """Room for the figures over some spans."""
    shape = (len(job.figures), len(MODES), rows)
    return {field: np.empty(shape, np.int8 if field == "reason" else np.float64) for field in shown}


def _part(judged: Judged, rows: slice) -> Judged:
    """Give the room of some rows."""
    return {field: room[:, :, rows] for field, room in judged.items()}


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
