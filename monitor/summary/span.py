"""The time a summary is about: whole days of the plant's own calendar, cut where the catalyst was changed."""

from __future__ import annotations

import calendar
from dataclasses import dataclass
from datetime import UTC, date, datetime, timedelta
from zoneinfo import ZoneInfo

import numpy as np
from numpy.typing import NDArray

from ingest.parts import instant_us
from ingest.unit import Unit
from monitor.windows import local_midnights
from monitor.wording import utc

Times = NDArray[np.int64]

WHOLE = "whole span"
HOUR_US = 3_600_000_000
CHANGE = "catalyst change"


@dataclass(frozen=True, slots=True)
class Span:
    """Days of the plant's calendar, first and last included; `edges_us` are their midnights [us UTC]."""

    zone: str
    first: date
    last: date
    edges_us: Times  # (days + 1,)

    @property
    def first_us(self) -> int:
        """Give the first instant [us UTC]."""
        return int(self.edges_us[0])

    @property
    def last_us(self) -> int:
        """Give the first instant after it [us UTC]."""
        return int(self.edges_us[-1])

    @property
    def days(self) -> list[date]:
        """List the days."""
        return [self.first + timedelta(days=place) for place in range(len(self.edges_us) - 1)]

    @property
    def is_month(self) -> bool:
        """Tell whether it is one whole month of the calendar."""
        return self.first.day == 1 and (self.first, self.last) == _month_of(self.first)

    @property
    def key(self) -> str:
        """Give the name that stands in file names and in the store: 2026-04, or both days."""
        return f"{self.first:%Y-%m}" if self.is_month else f"{self.first}_{self.last}"

    @property
    def name(self) -> str:
        """Give the name that people read."""
        if self.is_month:
            return f"{self.first:%B %Y}"
        return f"{self.first.day} {self.first:%b %Y} to {self.last.day} {self.last:%b %Y}"


@dataclass(frozen=True, slots=True)
class Stretch:
    """A stretch of a span with one catalyst charge, or the whole span; `charged` is None where unknown."""

    name: str
    first_us: int
    last_us: int
    charged: datetime | None


def span_of(zone: str, first: date, last: date) -> Span:
    """Give the span of some days.

    Parameters
    ----------
    zone : str
        IANA name of the plant's zone.
    first, last : date
        Both included.

    Returns
    -------
    Span
    """
    noon = timedelta(hours=12)
    start, end = (
        instant_us(datetime(day.year, day.month, day.day, tzinfo=UTC) + noon) for day in (first, last)
    )
    edges = local_midnights(zone, start - 2 * 24 * HOUR_US, end + 2 * 24 * HOUR_US)
    # Noon UTC may be another day in plant time: the first edge is found by its date.
    begin = (first - _local_day(int(edges[0]), zone)).days
    return Span(zone, first, last, edges[begin : begin + (last - first).days + 2])


def month_span(zone: str, year: int, month: int) -> Span:
    """Give the span of one month, of 743 or 745 hours where the clock is changed.

    Parameters
    ----------
    zone : str
        IANA name of the plant's zone.
    year, month : int

    Returns
    -------
    Span
    """
    return span_of(zone, *_month_of(date(year, month, 1)))


def before(span: Span) -> Span:
    """Give the month before a month, or as many days before other spans.

    Parameters
    ----------
    span : Span

    Returns
    -------
    Span
    """
    last = span.first - timedelta(days=1)
    if span.is_month:
        return span_of(span.zone, *_month_of(last))
    return span_of(span.zone, span.first - (span.last - span.first) - timedelta(days=1), last)


def year_before(span: Span) -> Span:
    """Give the same days of the year before; 29 February becomes the 28th.

    Parameters
    ----------
    span : Span

    Returns
    -------
    Span
    """
    first, last = (_year_earlier(day) for day in (span.first, span.last))
    return span_of(span.zone, first, _month_of(last)[1] if span.is_month else last)


def stretches_of(unit: Unit, span: Span) -> tuple[Stretch, ...]:
    """Cut a span where the catalyst was changed: what is before says nothing about what is after.

    Parameters
    ----------
    unit : Unit
        Its events and the moment its catalyst was charged.
    span : Span

    Returns
    -------
    tuple of Stretch
        One stretch where nothing was changed; else one per charge, then the whole span.
    """
    changes = charges(unit)
    cuts = [at for at in changes if span.first_us < instant_us(at) < span.last_us]
    edges = [span.first_us, *(instant_us(at) for at in cuts), span.last_us]
    latest = [_latest(changes, edge) for edge in edges[:-1]]
    whole = Stretch(WHOLE, span.first_us, span.last_us, latest[-1])
    if not cuts:
        return (whole,)
    pieces = zip(edges[:-1], edges[1:], latest, strict=True)
    return (*(Stretch(charge_name(at, span.zone), first, last, at) for first, last, at in pieces), whole)


def charges(unit: Unit) -> list[datetime]:
    """List when catalyst was charged, as the unit file tells.

    Parameters
    ----------
    unit : Unit

    Returns
    -------
    list of datetime
        Ascending, zone-aware.
    """
    stated = [] if unit.catalyst_charged is None else [unit.catalyst_charged]
    return sorted({*stated, *(event.at for event in unit.events if event.kind == CHANGE)})


def charge_name(charged: datetime | None, zone: str) -> str:
    """Name a catalyst charge by its day.

    Parameters
    ----------
    charged : datetime or None
        Zone-aware.
    zone : str
        IANA name of the plant's zone.

    Returns
    -------
    str
        `charge of 10 Feb 2026`.
    """
    if charged is None:
        return "charge of unknown date"
    day = _local_day(instant_us(charged), zone)
    return f"charge of {day.day} {day:%b %Y}"


def _latest(changes: list[datetime], edge_us: int) -> datetime | None:
    earlier = [at for at in changes if instant_us(at) <= edge_us]
    return earlier[-1] if earlier else None


def _month_of(day: date) -> tuple[date, date]:
    """First and last day of the month that a day lies in."""
    return day.replace(day=1), day.replace(day=calendar.monthrange(day.year, day.month)[1])


def _year_earlier(day: date) -> date:
    last = calendar.monthrange(day.year - 1, day.month)[1]
    return day.replace(year=day.year - 1, day=min(day.day, last))


def _local_day(instant: int, zone: str) -> date:
    return utc(instant).astimezone(ZoneInfo(zone)).date()
