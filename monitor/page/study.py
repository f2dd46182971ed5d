"""What takes work to answer: summaries, how instruments served; worked out anew, cached like `data`.

Every key holds the store's version and the unit file's hash.
"""

from __future__ import annotations

from dataclasses import dataclass
from datetime import datetime, timedelta
from pathlib import Path
from zoneinfo import ZoneInfo

import pandas as pd
import streamlit as st

from ingest.database import program_version
from ingest.parts import sha256_of
from ingest.screen import Finding
from ingest.unit import Unit
from monitor import attendance, store
from monitor.delays import Delays, delays
from monitor.judge import judge
from monitor.page import data
from monitor.summary.identity import Stamp
from monitor.summary.issue import kept, sealed
from monitor.summary.making import compared, summarise
from monitor.summary.span import Span, month_span
from monitor.summary.table import Summary

MOST_STEPS = 1_500  # along time: about as many as a wide screen has room for
KEPT = 24  # answers kept per getter: two years of months
NOBODY = "nobody: looked at on the page"
Version = tuple[str, str, str]


def _version(unit: Unit) -> Version:
    """Store, what its last pass committed, and the hash of the unit file."""
    folder, files = data.site()
    return str(folder), data.version() or "", sha256_of(next(one for one in files if one.stem == unit.key))


def months(unit: Unit) -> dict[str, Span]:
    """List the months of the plant's calendar that the store knows of.

    Parameters
    ----------
    unit : Unit
        One reactor.

    Returns
    -------
    dict of str to Span
        By the name that people read, newest first.
    """
    known = data.span(unit)
    if known is None:
        return {}
    zone = ZoneInfo(unit.time_zone)
    first, last = (pd.Period(edge.tz_convert(zone).date(), "M") for edge in (known.first, known.last))
    found = [month_span(unit.time_zone, one.year, one.month) for one in pd.period_range(first, last)]
    return {one.name: one for one in reversed(found)}


@st.cache_data(max_entries=KEPT, show_spinner=False)
def _summary(version: Version, key: str, _unit: Unit, _asked: Span) -> Summary:
    del key  # of the span
    stamp = Stamp(NOBODY, version[2], program_version())
    return sealed(summarise(Path(version[0]), _unit, _asked, stamp), 0)


def summary(unit: Unit, asked: Span) -> Summary:
    """Give the summary of a span as the store stands now.

    Parameters
    ----------
    unit : Unit
        One reactor.
    asked : Span
        Of which the store holds cells.

    Returns
    -------
    Summary
        A draft.
    """
    return _summary(_version(unit), f"{unit.key} {asked.key}", unit, asked)


@st.cache_data(max_entries=KEPT, show_spinner=False)
def _issued(version: Version, unit: str, key: str) -> tuple[Summary, ...]:
    return kept(Path(version[0]), unit, key)


def issued(unit: Unit, asked: Span) -> tuple[Summary, ...]:
    """Give the revisions that were issued of a span.

    Parameters
    ----------
    unit : Unit
        One reactor.
    asked : Span

    Returns
    -------
    tuple of Summary
        In their order.
    """
    return _issued(_version(unit), unit.key, asked.key)


@st.cache_data(max_entries=KEPT, show_spinner=False)
def _compared(version: Version, keys: str, _unit: Unit, _asked: Span, _other: Span) -> pd.DataFrame:
    del keys  # of the two spans
    return compared(Path(version[0]), _unit, _asked, _other)


def against(unit: Unit, asked: Span, other: Span) -> pd.DataFrame:
    """Compare a span with any other one.

    Parameters
    ----------
    unit : Unit
        One reactor.
    asked, other : Span

    Returns
    -------
    DataFrame
        As the table `comparisons` of a summary.
    """
    return _compared(_version(unit), f"{unit.key} {asked.key} {other.key}", unit, asked, other)


@dataclass(frozen=True, slots=True)
class Service:
    """How the instruments served over a span, as `attendance` gives it; `step` is that of the runs."""

    table: pd.DataFrame
    runs: pd.DataFrame
    calibrations: pd.DataFrame
    outvoted: pd.Series[float]
    step: timedelta


@st.cache_data(max_entries=KEPT, show_spinner=False)
def _service(version: Version, key: str, span: tuple[datetime, datetime], _unit: Unit) -> Service:
    del key  # of the unit
    cells = store.cells(Path(version[0]), _unit, span)
    return Service(
        table=attendance.attendance(_unit, cells),
        runs=attendance.condition_runs(_unit, cells, most=MOST_STEPS),
        calibrations=attendance.calibrations(_unit, cells),
        outvoted=attendance.outvoted(_unit, cells),
        step=attendance.step_of(cells, MOST_STEPS) * _unit.cell,
    )


def service(unit: Unit, first: datetime, last: datetime) -> Service:
    """Sum up how the instruments served over a span.

    Parameters
    ----------
    unit : Unit
        One reactor.
    first, last : datetime
        From the first cell start to before the second, zone-aware.

    Returns
    -------
    Service
    """
    return _service(_version(unit), unit.key, (first, last), unit)


@st.cache_data(max_entries=KEPT, show_spinner=False)
def _findings(
    version: Version, key: str, span: tuple[datetime, datetime], _unit: Unit
) -> tuple[Finding, ...]:
    del key  # of the unit
    return store.findings(Path(version[0]), _unit, span)


def findings(unit: Unit, first: datetime, last: datetime) -> tuple[Finding, ...]:
    """Ask every check what it says of the readings of a span.

    Parameters
    ----------
    unit : Unit
        One reactor.
    first, last : datetime
        Zone-aware.

    Returns
    -------
    tuple of Finding
        As `store.findings` gives them.
    """
    return _findings(_version(unit), unit.key, (first, last), unit)


@st.cache_data(max_entries=KEPT, show_spinner=False)
def _delays(version: Version, key: str, days: int, _unit: Unit) -> Delays:
    del key  # of the unit
    return delays(Path(version[0]), _unit, days)


def lags(unit: Unit, days: int) -> Delays:
    """Tell how late the analyzers were on the last days of the record.

    Parameters
    ----------
    unit : Unit
        One reactor.
    days : int
        How many.

    Returns
    -------
    Delays
    """
    return _delays(_version(unit), unit.key, days, unit)


@st.cache_data(max_entries=KEPT, show_spinner=False)
def _parallel(unit_file: str, _unit: Unit) -> tuple[tuple[str, ...], ...]:
    del unit_file  # its hash
    return judge(_unit).parallel


def parallel(unit: Unit) -> tuple[tuple[str, ...], ...]:
    """Name the sets of instruments that the balance cannot tell apart, whatever they read.

    Parameters
    ----------
    unit : Unit
        One reactor.

    Returns
    -------
    tuple of tuple of str
        Names of causes: instruments, or what several share.
    """
    return _parallel(_version(unit)[2], unit)
