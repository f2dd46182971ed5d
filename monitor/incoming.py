"""What came in when: deliveries by hour or by plant day, and their chart, in which a gap is a gap."""

from __future__ import annotations

from datetime import datetime, timedelta

import numpy as np
import pandas as pd

from monitor import wording
from monitor.axes import Ink, Spec, frame_spec, microseconds, time_scale
from monitor.charts import Chart
from monitor.deliveries import ASIDE, SHAPES

HEIGHT = 110
DAY = timedelta(days=1)


def by_time(
    frame: pd.DataFrame, first: datetime, last: datetime, zone: str, *, step: timedelta
) -> pd.DataFrame:
    """Count what was taken in, by hours or by plant days.

    Parameters
    ----------
    frame : DataFrame
        As `deliveries.table` gives it.
    first, last : datetime
        Span that is shown whole, zone-aware.
    zone : str
        IANA name of the plant's zone.
    step : timedelta
        Whole hours, counted from plant midnight; a day is one of the plant's calendar, of 23 or 25 h
        where clocks change.

    Returns
    -------
    DataFrame
        One row per step: start and end (UTC), exports, set_aside, readings, when and what in words.
    """
    edges = _edges(pd.Timestamp(first), pd.Timestamp(last), zone, step)
    place = np.searchsorted(microseconds(edges), microseconds(pd.DatetimeIndex(frame["taken_at"])), "right")
    inside = (place > 0) & (place < len(edges))
    bins, count = place[inside] - 1, len(edges) - 1
    found = frame[inside]
    counts = {
        "exports": np.bincount(bins, minlength=count),
        "set_aside": np.bincount(bins, found["status"] == ASIDE, minlength=count).astype(int),
        "readings": np.bincount(bins, found["readings"], minlength=count).astype(int),
    }
    start, end = edges[:-1].tz_convert("UTC"), edges[1:].tz_convert("UTC")
    form = "%d %b" if step >= DAY else "%d %b %H:%M"
    when = edges[:-1].strftime(form).str.lstrip("0")
    made = pd.DataFrame({"start": start, "end": end, **counts, "when": when})
    return made.assign(what=[_words(*row) for row in zip(*counts.values(), strict=True)])


def _edges(first: pd.Timestamp, last: pd.Timestamp, zone: str, step: timedelta) -> pd.DatetimeIndex:
    """Beginnings of steps in plant time; the first and the last instant lie in the first and the last."""
    freq = "D" if step >= DAY else f"{step // timedelta(hours=1)}h"
    edges = pd.date_range(first.tz_convert(zone).normalize(), last.tz_convert(zone) + step, freq=freq)
    return edges[max(edges.searchsorted(first, "right") - 1, 0) :]


def _words(exports: int, aside: int, readings: int) -> str:
    """What came in during one step."""
    if not exports:
        return "nothing"
    files = f"{exports} export{'s' if exports > 1 else ''}, {wording.number(readings, 0)} readings"
    return files + (f", {aside} set aside" if aside else "")


def longest_gap(frame: pd.DataFrame, first: datetime, last: datetime) -> tuple[datetime, datetime] | None:
    """Find the longest time without a delivery; the time from the last delivery on counts too.

    Parameters
    ----------
    frame : DataFrame
        As `deliveries.table` gives it.
    first, last : datetime
        Span looked at, zone-aware; deliveries before the first one of the record are not missed.

    Returns
    -------
    tuple of datetime or None
        From and to, UTC; None when nothing was ever delivered.
    """
    taken = frame["taken_at"].sort_values().reset_index(drop=True)
    until = pd.Timestamp(last)
    if taken.empty:
        return None
    before = taken[taken <= pd.Timestamp(first)].tail(1)
    within = taken[(taken > pd.Timestamp(first)) & (taken < until)]
    marks = pd.DatetimeIndex([*before, *within, until]).as_unit("us")
    if len(marks) < 2:
        return None
    place = int(np.diff(microseconds(marks)).argmax())
    return marks[place].to_pydatetime(), marks[place + 1].to_pydatetime()


def chart(bins: pd.DataFrame, zone: str, ink: Ink) -> Chart:
    """Draw how many readings came in, on a scale on which one large delivery hides no small one.

    Parameters
    ----------
    bins : DataFrame
        As `by_time` gives it.
    zone : str
        IANA name of the plant's zone.
    ink : Ink
        Of the theme.

    Returns
    -------
    Chart
    """
    when = time_scale(bins["start"].iloc[0], bins["end"].iloc[-1], zone, title=True)
    # Both layers state the same axis: where one is silent the other loses its ticks.
    count = {"field": "readings", "type": "quantitative", **_count_scale(int(bins["readings"].max()))}
    tooltip = [{"field": "when", "title": "plant time"}, {"field": "what", "title": "taken in"}]
    bars: Spec = {
        "data": {"name": "bins"},
        "mark": {"type": "rect", "color": ink.series, "stroke": None},
        "encoding": {
            "x": {"field": "start", **when},
            "x2": {"field": "end"},
            "y": count,
            "y2": {"datum": 0},
            "tooltip": tooltip,
        },
    }
    aside: Spec = {
        "data": {"name": "bins"},
        "transform": [{"filter": "datum.set_aside > 0"}],
        "mark": {"type": "text", "text": SHAPES[ASIDE], "color": ink.alarm_text, "fontSize": 15, "dy": -9},
        "encoding": {
            "x": {"field": "middle", **when},
            "y": count,
            "tooltip": tooltip,
        },
    }
    drawn = bins.assign(middle=bins["start"] + (bins["end"] - bins["start"]) / 2)
    spec = frame_spec(ink) | {"height": HEIGHT, "layer": [bars, aside]}
    empty = int((bins["exports"] == 0).sum())
    alt = (
        f"Readings taken in from {bins['when'].iloc[0]} to {bins['when'].iloc[-1]}, plant time: "
        f"{wording.number(int(bins['readings'].sum()), 0)} in {int(bins['exports'].sum())} exports, "
        f"{empty} of {len(bins)} steps without any."
    )
    return Chart(spec, {"bins": drawn}, alt)


def _count_scale(most: int) -> Spec:
    """From nought to powers of ten."""
    top = max(1, int(np.ceil(np.log10(max(most, 10)))))
    values = [0, *(10**power for power in range(1, top + 1))]
    table = ", ".join(f"'{value}': '{wording.number(value, 0)}'" for value in values)
    axis: Spec = {
        "values": values, "title": "readings", "labelExpr": f"({{{table}}})[toString(datum.value)] || ''",
        "labelOverlap": "greedy", "minExtent": 60,
    }  # fmt: skip
    return {"scale": {"type": "symlog", "constant": 5, "domain": [0, 4 * 10**top]}, "axis": axis}
