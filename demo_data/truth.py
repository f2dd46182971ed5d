"""What was put in and what a perfect program would show: the record that end-to-end tests compare with."""

from __future__ import annotations

from datetime import UTC, date, datetime
from typing import Any
from zoneinfo import ZoneInfo

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

from demo_data import plant, scenario
from demo_data.kinetics import Floats
from demo_data.plant import STATE, Truth
from demo_data.scenario import Calibration

HOUR_US = 60 * scenario.MINUTE_US


def local_days(time_us: NDArray[np.int64]) -> tuple[list[date], NDArray[np.int64]]:
    """Give the local days of a time axis, and to which of them each time belongs.

    Parameters
    ----------
    time_us : array, shape (t,)
        Ascending, UTC [us].

    Returns
    -------
    days : list of date
        In order.
    day : array, shape (t,)
        Index into `days`.
    """
    zone = ZoneInfo(scenario.TIME_ZONE)
    first = datetime.fromtimestamp(time_us[0] / 1e6, zone).date()
    last = datetime.fromtimestamp(time_us[-1] / 1e6, zone).date()
    days = [date.fromordinal(n) for n in range(first.toordinal(), last.toordinal() + 1)]
    midnights = [scenario.minutes(day, 1)[0] for day in days]
    return days, np.searchsorted(midnights, time_us, side="right") - 1


def daily(truth: Truth) -> list[dict[str, Any]]:
    """True figures of each local day as ratios of sums over all its hours, and whether it is healthy.

    Parameters
    ----------
    truth : Truth
        What truly happened.

    Returns
    -------
    list of dict
        day, hours, healthy, figures; a figure is None where nothing was fed.
    """
    start, flow_kmol_h = plant.cells(truth)
    days, day = local_days(start)
    kmol = np.zeros((len(days), len(STATE)))
    np.add.at(kmol, day, flow_kmol_h / 6)  # cells of 10 min
    figures = plant.figures(kmol)
    hours = np.bincount(day) / 6
    well = healthy(truth, days)
    return [
        {
            "day": str(days[n]),
            "hours": float(hours[n]),
            "healthy": bool(well[n]),
            "figures": {name: _number(value[n]) for name, value in figures.items()},
        }
        for n in range(len(days))
    ]


def healthy(truth: Truth, days: list[date]) -> NDArray[np.bool_]:
    """Tell the days on which nothing is wrong: no fault, no outage and none of its settling.

    Parameters
    ----------
    truth : Truth
        For its events.
    days : list of date
        Local days.

    Returns
    -------
    array, shape (d,)
        True for a healthy day.
    """
    well = np.ones(len(days), dtype=bool)
    midnight = np.array([scenario.minutes(day, 1)[[0, -1]] for day in days])
    for event in truth.events:
        if not scenario.KINDS[event.kind][1]:
            start, end = scenario.span_us(event, truth.time[0])
            end += round(scenario.SETTLING_H.get(event.kind, 0.0) * HOUR_US)
            well &= (midnight[:, 1] < start) | (midnight[:, 0] >= end)
    return well


def record(truth: Truth, drawn: dict[str, float], calibrations: tuple[Calibration, ...]) -> dict[str, Any]:
    """Give everything that was put in, ready for JSON.

    Parameters
    ----------
    truth : Truth
        What truly happened.
    drawn : dict of float
        Standard systematic errors of the instruments, multiples of k = 1.
    calibrations : tuple of Calibration
        When analyzers were off their sample.

    Returns
    -------
    dict
        first and end of the data, events, calibrations, days, errors drawn; times in UTC, ISO 8601.
    """
    first, end = int(truth.time[0]), int(truth.time[-1]) + scenario.MINUTE_US
    windows = scenario.windows_us(first, end - scenario.MINUTE_US, calibrations)
    events = []
    for event in truth.events:
        begins, ends = scenario.span_us(event, first)
        if begins < end:
            moved, well = scenario.KINDS[event.kind]
            events.append(
                {
                    "kind": event.kind,
                    "moved": moved,
                    "healthy": well,
                    "start": _iso(begins),
                    "end": _iso(min(ends, end)),
                    "tag": event.tag,
                    "size_pct": event.size,
                },
            )
    return {
        "first": _iso(first),
        "end": _iso(end),
        "time_zone": scenario.TIME_ZONE,
        "events": events,
        "calibrations": [[_iso(begins), _iso(ends)] for begins, ends in windows.tolist()],
        "days": daily(truth),
        "systematic_errors_drawn": drawn,
    }


def table(truth: Truth) -> pa.Table:
    """True mean flows of each 10 min cell: `start`, then one column `stream: species` [kmol/h] per state."""
    start, flow_kmol_h = plant.cells(truth)
    columns = {"start": pa.array(start, pa.timestamp("us", "UTC"))}
    columns |= {f"{stream}: {name}": pa.array(flow_kmol_h[:, n]) for n, (stream, name) in enumerate(STATE)}
    return pa.table(columns)


def _number(value: Floats) -> float | None:
    """Give a number for JSON, which has no NaN."""
    return float(value) if np.isfinite(value) else None


def _iso(time_us: int) -> str:
    """Give a time in UTC as ISO 8601."""
    return datetime.fromtimestamp(time_us / 1e6, UTC).isoformat()
