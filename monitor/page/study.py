"""What takes work to answer: summaries of months, worked out anew from the store; cached like `data`.

Every key holds the store's version and the unit file's hash.
"""

from __future__ import annotations

from pathlib import Path
from zoneinfo import ZoneInfo

import pandas as pd
import streamlit as st

from ingest.database import program_version
from ingest.parts import sha256_of
from ingest.unit import Unit
from monitor.page import data
from monitor.summary.identity import Stamp
from monitor.summary.issue import kept, sealed
from monitor.summary.making import compared, summarise
from monitor.summary.span import Span, month_span
from monitor.summary.table import Summary

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
