"""What all views read of the store, cached; every key holds the store's version.

Frames come from what a pass wrote. The version of the store is in the key of every cached answer, so that
a pass shows at the next refresh and nothing stale is ever shown.
"""

from __future__ import annotations

import sys
from dataclasses import dataclass
from datetime import datetime, timedelta
from pathlib import Path
from typing import Any

import pandas as pd
import streamlit as st

from ingest import journal
from ingest.cells import OPERATING
from ingest.instruments import balance_instruments
from ingest.journal import Line
from ingest.records import Export
from ingest.unit import Unit, Watch
from ingest.unitfile import load
from monitor import board, desk, shiftnote, store, tryout, witnesses
from monitor.alerts import Alert, State
from monitor.amounts import amount_names
from monitor.days import figure_step
from monitor.figures import Figure, figures_of
from monitor.trials import Point, Trial

Frame = pd.DataFrame
KEPT = 64  # answers kept per getter


@dataclass(frozen=True, slots=True)
class Span:
    """From the start of the first cell to the end of the last one, UTC."""

    first: pd.Timestamp
    last: pd.Timestamp


def site() -> tuple[Path, list[Path]]:
    """Give the store and the unit files that the command line named.

    Returns
    -------
    tuple of Path and list of Path
        As `launch.command` wrote them.
    """
    folder, *files = sys.argv[1:]
    return Path(folder), [Path(file) for file in files]


def units() -> dict[str, Unit]:
    """Read the unit files, again only when one was changed.

    Returns
    -------
    dict of str to Unit
        Key -> unit, in the order of the command line.
    """
    read = [_unit(str(path), _identity(path)) for path in site()[1]]
    return {unit.key: unit for unit in read}


def _identity(path: Path) -> tuple[int, int, int]:
    """What changes when a file is written again."""
    stat = path.stat() if path.exists() else None
    return (stat.st_mtime_ns, stat.st_size, stat.st_ino) if stat else (0, 0, 0)


@st.cache_resource(max_entries=KEPT, show_spinner=False)
def _unit(path: str, identity: tuple[int, int, int]) -> Unit:
    del identity  # part of the key
    return load(Path(path))


def version() -> str | None:
    """Name what the last pass committed.

    Returns
    -------
    str or None
        Changes with every pass; None when there is no store yet.
    """
    return store.version(site()[0])


def figures(unit: Unit) -> dict[str, Figure]:
    """Give the figures of a unit by name.

    Parameters
    ----------
    unit : Unit
        One reactor.

    Returns
    -------
    dict of str to Figure
        In the order they are read.
    """
    return {figure.name: figure for figure in figures_of(unit, amount_names(unit))}


@st.cache_data(max_entries=KEPT, show_spinner=False)
def _read(folder: str, version: str, what: str, arguments: tuple[Any, ...]) -> Any:
    """Read one thing at one version of the store."""
    del version  # part of the key
    return getattr(store, what)(Path(folder), *arguments)


def _now(what: str, *arguments: Any) -> Any:
    return _read(str(site()[0]), version() or "", what, arguments)


@st.cache_data(max_entries=KEPT, show_spinner=False)
def _sums(folder: str, version: str, key: str, span: tuple[datetime, datetime], _unit: Unit) -> Frame:
    """Sums of one span at one version of the store; the unit file's identity is part of `key`."""
    del version, key
    return store.sums(Path(folder), _unit, span)


def sums(unit: Unit, window: timedelta) -> Frame:
    """Give what the figures of the newest window are a ratio of.

    Parameters
    ----------
    unit : Unit
        One reactor.
    window : timedelta
        Length.

    Returns
    -------
    DataFrame
        Index (figure, mode), columns as in `windows.SPAN_FIELDS`; empty when nothing is there.
    """
    known = span(unit)
    edges = (known.last - window, known.last) if known else None
    key = f"{unit.key} {[_identity(path) for path in site()[1]]}"
    return _sums(str(site()[0]), version() or "", key, edges, unit) if edges else pd.DataFrame()


def span(unit: Unit) -> Span | None:
    """Give the time that the store knows of a unit.

    Parameters
    ----------
    unit : Unit
        One reactor.

    Returns
    -------
    Span or None
        None when nothing was taken in yet.
    """
    edges = _now("edges", unit.key)
    return Span(edges[0], edges[1] + unit.cell) if edges else None


def latest(unit: Unit, window: timedelta) -> Frame:
    """Give all figures of the newest window end.

    Parameters
    ----------
    unit : Unit
        One reactor.
    window : timedelta
        One of its windows.

    Returns
    -------
    DataFrame
        At most one row; columns (figure, mode, field).
    """
    known = span(unit)
    if known is None:
        return pd.DataFrame()
    frame = _now("figures", unit.key, window, None, (known.last - figure_step(unit), known.last))
    newest: Frame = frame.tail(1)
    return newest


def figure(
    unit: Unit, window: timedelta, name_mode: tuple[str, str], first: datetime, last: datetime
) -> Frame:
    """Give one figure over a span.

    Parameters
    ----------
    unit : Unit
        One reactor.
    window : timedelta
        One of its windows.
    name_mode : tuple of str
        Figure and mode.
    first, last : datetime
        Window ends wanted, both included, zone-aware.

    Returns
    -------
    DataFrame
        Columns value, half_width, coverage, reason; index of window ends, UTC.
    """
    frame = _now("figures", unit.key, window, (name_mode,), (first, last))
    if frame.empty:
        nothing = pd.DatetimeIndex([], tz="UTC", name="end")
        return pd.DataFrame({f: [] for f in ("value", "half_width", "coverage", "reason")}, index=nothing)
    chosen: Frame = frame[name_mode]
    return chosen


def operating(unit: Unit, first: datetime, last: datetime) -> Frame:
    """Give the operating condition over a span as runs.

    Parameters
    ----------
    unit : Unit
        One reactor.
    first, last : datetime
        Cell starts wanted, zone-aware.

    Returns
    -------
    DataFrame
        Columns start, end, word.
    """
    return board.operating_runs(_now("operating", unit.key, (first, last)), OPERATING, unit.cell)


def adjusted(unit: Unit, first: datetime, last: datetime) -> Frame:
    """Sum up how far each instrument of the balance was adjusted over a span.

    Parameters
    ----------
    unit : Unit
        One reactor.
    first, last : datetime
        Cell starts wanted, zone-aware.

    Returns
    -------
    DataFrame
        As `witnesses.adjustments` gives it.
    """
    names = tuple(one.name for one in balance_instruments(unit))
    return witnesses.adjustments(*_now("adjustments", unit.key, names, (first, last)))


def fit(unit: Unit, first: datetime, last: datetime) -> Frame:
    """Give the objective per degree of freedom with its bound over a span.

    Parameters
    ----------
    unit : Unit
        One reactor.
    first, last : datetime
        Cell starts wanted, zone-aware.

    Returns
    -------
    DataFrame
        As `witnesses.fit` gives it, index of cell starts, UTC.
    """
    frame = _now("objective", unit.key, (first, last))
    return witnesses.fit(frame["objective"], frame["freedom"])


def episodes(unit: Unit) -> Frame:
    """Give all episodes of a unit.

    Parameters
    ----------
    unit : Unit
        One reactor.

    Returns
    -------
    DataFrame
        One row per episode; times tz-aware UTC, `cleared` NaT while open.
    """
    found: Frame = _now("episodes", unit.key)
    return found


def exports() -> Frame:
    """Give all exports taken in or set aside.

    Returns
    -------
    DataFrame
        As `deliveries.table` gives it, newest first.
    """
    found: Frame = _now("exports")
    return found


def entries(numbers: tuple[int, ...]) -> list[Export]:
    """Give some exports with their whole accounts.

    Parameters
    ----------
    numbers : tuple of int
        Of the exports.

    Returns
    -------
    list of Export
        In the order of the numbers.
    """
    found: list[Export] = _now("entries", numbers)
    return found


def last_export() -> datetime | None:
    """Say when the last export was taken in.

    Returns
    -------
    datetime or None
        Zone-aware UTC; None when there was none.
    """
    taken: datetime | None = _now("last_export")
    return taken


@st.cache_data(max_entries=KEPT, show_spinner=False)
def _alerts(folder: str, version: str, key: str, now: datetime) -> tuple[tuple[Alert, State], ...]:
    del version  # part of the key
    return desk.read(Path(folder), key, now)


def alerts(unit: Unit, now: datetime) -> tuple[tuple[Alert, State], ...]:
    """Give every alert of a unit with where it stands, to the minute.

    Parameters
    ----------
    unit : Unit
        One reactor.
    now : datetime
        Zone-aware; shelves end by themselves.

    Returns
    -------
    tuple of (Alert, State)
        As `desk.read` gives them.
    """
    minute = now.replace(second=0, microsecond=0)
    return _alerts(str(site()[0]), version() or "", unit.key, minute)


@st.cache_data(max_entries=KEPT, show_spinner=False)
def _history(folder: str, version: str, _alert: Alert, key: str) -> tuple[tuple[datetime, Alert], ...]:
    del version, key  # parts of the key
    return desk.history(Path(folder), _alert)


def history(alert: Alert) -> tuple[tuple[datetime, Alert], ...]:
    """Give what an alert was at each pass that changed it.

    Parameters
    ----------
    alert : Alert
        One of them.

    Returns
    -------
    tuple of (datetime, Alert)
        Oldest first.
    """
    return _history(str(site()[0]), version() or "", alert, alert.id)


@st.cache_data(max_entries=KEPT, show_spinner=False)
def _lines(folder: str, version: str, key: str) -> tuple[Line, ...]:
    del version  # part of the key
    return journal.lines(Path(folder), unit=key)


def lines(unit: Unit) -> tuple[Line, ...]:
    """Give the journal of a unit.

    Parameters
    ----------
    unit : Unit
        One reactor.

    Returns
    -------
    tuple of Line
        In the order of writing.
    """
    return _lines(str(site()[0]), version() or "", unit.key)


@st.cache_data(max_entries=KEPT, show_spinner=False)
def _outages(
    folder: str, version: str, key: str, span: tuple[datetime, datetime], _unit: Unit
) -> tuple[shiftnote.Out, ...]:
    del version, key  # parts of the key
    return shiftnote.outages(_unit, store.cells(Path(folder), _unit, span))


def outages(unit: Unit, first: datetime, last: datetime) -> tuple[shiftnote.Out, ...]:
    """Find the instruments whose readings did not count in a span.

    Parameters
    ----------
    unit : Unit
        One reactor.
    first, last : datetime
        From the first cell start to before the second, zone-aware; cells of it are stored.

    Returns
    -------
    tuple of Out
        As `shiftnote.outages` gives them.
    """
    key = f"{unit.key} {[_identity(path) for path in site()[1]]}"
    return _outages(str(site()[0]), version() or "", key, (first, last), unit)


@st.cache_data(max_entries=KEPT, show_spinner="Trying it on the past ...")
def _trial(
    folder: str,
    version: str,
    key: str,
    now: datetime,
    _unit: Unit,
    *,
    past: timedelta | None,
    watch: str,
    _watch: Watch,
) -> tuple[Trial, tuple[Point, ...]]:
    del version, key, watch  # parts of the key
    span = tryout.whole_span(Path(folder), _unit, past)
    return tryout.trial(Path(folder), _unit, _watch, span, now=now)


def trial(unit: Unit, watch: Watch, past: timedelta | None, now: datetime) -> tuple[Trial, tuple[Point, ...]]:
    """Try a watch on the last part of the record.

    Parameters
    ----------
    unit : Unit
        One reactor.
    watch : Watch
        Real or proposed.
    past : timedelta or None
        How much of the record; None for all.
    now : datetime
        Zone-aware.

    Returns
    -------
    tuple of Trial and tuple of Point
        As `tryout.trial` gives them.
    """
    key = f"{unit.key} {[_identity(path) for path in site()[1]]}"
    hour = now.replace(minute=0, second=0, microsecond=0)
    return _trial(
        str(site()[0]), version() or "", key, hour, unit, past=past, watch=repr(watch), _watch=watch
    )
