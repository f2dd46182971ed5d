"""What is put into the invented plant: events and calibration windows, read from scenario.toml.

Every kind of event is one row of `KINDS`: what it is a fault of, and whether a day with it is healthy.
"""

from __future__ import annotations

import tomllib
from collections.abc import Iterator
from dataclasses import dataclass
from datetime import date, datetime, time, timedelta
from pathlib import Path
from zoneinfo import ZoneInfo

import numpy as np
from numpy.typing import NDArray

SCENARIO_FILE = Path(__file__).with_name("scenario.toml")
TIME_ZONE = "Europe/Berlin"
MINUTE_US = 60_000_000
DAY_US = 1440 * MINUTE_US

KINDS = {
    # kind: (what moved, a day with it counts as healthy)
    "reading lost": ("data", True),  # a few readings less: no figure may move for it
    "historian gap": ("data", True),
    "analyzer stuck": ("instrument", False),
    "channel drift": ("instrument", False),
    "feed change": ("operation", True),  # another operating point, not a fault
    "outage": ("operation", False),
    "selectivity loss": ("reactor", False),
}
FOREVER_H = 1e6  # stands for a length of inf
SETTLING_H = {"outage": 12.0}  # after its end a day is not yet healthy
WEEKDAYS = ("Monday", "Tuesday", "Wednesday", "Thursday", "Friday", "Saturday", "Sunday")


@dataclass(frozen=True, slots=True)
class Event:
    """Something put in: its kind, start [days after the first minute], length [h], tag and size [%]."""

    kind: str
    day: float
    hours: float
    tag: str | None = None
    size: float = 0.0


@dataclass(frozen=True, slots=True)
class Calibration:
    """A window that comes back every day, or on one weekday, at a local time."""

    at: time
    minutes: int
    weekday: str | None = None


@dataclass(frozen=True, slots=True)
class Scenario:
    """All that `scenario.toml` says."""

    start: date
    seed: int
    events: tuple[Event, ...]
    calibrations: tuple[Calibration, ...]


def load(path: Path = SCENARIO_FILE) -> Scenario:
    """Read a scenario; an unknown kind or key is a KeyError or TypeError of the author.

    Parameters
    ----------
    path : Path
        A TOML file like the one beside this module.

    Returns
    -------
    Scenario
        Events in the order of the file.
    """
    table = tomllib.loads(path.read_text(encoding="utf-8"))
    events = tuple(Event(**row) for row in table["event"])
    calibrations = tuple(Calibration(**row) for row in table["calibration"])
    return Scenario(table["start"], table["seed"], events, calibrations)


def to_us(moment: datetime) -> int:
    """Microseconds since the epoch of a moment with a zone."""
    return round(moment.timestamp()) * 1_000_000


def minutes(start: date, days: int) -> NDArray[np.int64]:
    """Every minute from one local midnight to another; a clock change makes a day of 23 or 25 h.

    Parameters
    ----------
    start : date
        First local day.
    days : int
        Local days.

    Returns
    -------
    array, shape (t,)
        UTC [us]; the last minute is the one before the closing midnight.
    """
    zone = ZoneInfo(TIME_ZONE)
    first = to_us(datetime.combine(start, time(), zone))
    end = to_us(datetime.combine(start + timedelta(days=days), time(), zone))
    return np.arange(first, end, MINUTE_US, dtype=np.int64)


def span_us(event: Event, first_us: int) -> tuple[int, int]:
    """Start and end of an event to the minute, UTC [us]; `first_us` is the first minute of the data."""
    start = first_us + round(event.day * 1440) * MINUTE_US
    return start, start + round(min(event.hours, FOREVER_H) * 60) * MINUTE_US


def during(time_us: NDArray[np.int64], event: Event, first_us: int) -> NDArray[np.bool_]:
    """Tell which times lie inside an event, its start included and its end not.

    Parameters
    ----------
    time_us : array, shape (t,)
        UTC [us].
    event : Event
        What to look for.
    first_us : int
        First minute of the data, UTC [us].

    Returns
    -------
    array, shape (t,)
        True inside.
    """
    start, end = span_us(event, first_us)
    return (time_us >= start) & (time_us < end)


def of_kind(events: tuple[Event, ...], kind: str) -> Iterator[Event]:
    """Give the events of one kind, in order; a kind that `KINDS` does not know is refused."""
    if kind not in KINDS:
        raise KeyError(kind)
    return (event for event in events if event.kind == kind)


def windows_us(first_us: int, last_us: int, windows: tuple[Calibration, ...]) -> NDArray[np.int64]:
    """Start and end of every calibration window that begins on one of the local days of a span.

    Parameters
    ----------
    first_us, last_us : int
        Span, UTC [us].
    windows : tuple of Calibration
        Windows that come back, by the local clock.

    Returns
    -------
    array, shape (w, 2)
        In the order of their start, UTC [us].
    """
    zone = ZoneInfo(TIME_ZONE)
    first, last = (datetime.fromtimestamp(moment / 1e6, zone).date() for moment in (first_us, last_us))
    found = []
    for window in windows:
        for ordinal in range(first.toordinal(), last.toordinal() + 1):
            day = date.fromordinal(ordinal)
            if window.weekday in (None, WEEKDAYS[day.weekday()]):
                start = to_us(datetime.combine(day, window.at, zone))
                found.append((start, start + window.minutes * MINUTE_US))
    return np.array(sorted(found), dtype=np.int64).reshape(-1, 2)


def calibrating(time_us: NDArray[np.int64], windows: tuple[Calibration, ...]) -> NDArray[np.bool_]:
    """Tell which times lie inside a calibration window.

    Parameters
    ----------
    time_us : array, shape (t,)
        Ascending, UTC [us]; at least one.
    windows : tuple of Calibration
        Windows that come back.

    Returns
    -------
    array, shape (t,)
        True inside a window, its start included and its end not.
    """
    inside = np.zeros(len(time_us), dtype=bool)
    for start, end in np.searchsorted(time_us, windows_us(time_us[0], time_us[-1], windows)):
        inside[start:end] = True
    return inside
