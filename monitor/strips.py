"""Condition strips: what was said of each instrument over time, by height and shape, not colour alone."""

from __future__ import annotations

import pandas as pd

from monitor import wording
from monitor.attendance import ABSENT, CALIBRATED, DOUBTED, GOOD, REFUSED, SHAPES
from monitor.axes import Ink, Spec, frame_spec, plant_time, time_scale
from monitor.charts import Chart

ROW_PX = 22
ROOM = 0.012  # of the width: a run shorter than that has no room for its shape
# Height of each kind within its row; an empty box for what is not there. Colours: Okabe-Ito (2008).
HEIGHTS = {GOOD: 0.16, DOUBTED: 0.42, CALIBRATED: 0.62, ABSENT: 0.82, REFUSED: 0.82}
WORDS = {
    GOOD: "good: thin line",
    DOUBTED: "doubted, takes part: low bar",
    CALIBRATED: "calibrating: bar",
    ABSENT: "missing or stale: empty box",
    REFUSED: "refused: full bar",
}


def strips(
    found: pd.DataFrame, shaded: pd.DataFrame, *, span: tuple[pd.Timestamp, pd.Timestamp], zone: str, ink: Ink
) -> Chart:
    """Draw one strip per instrument, on the time of which the unit was down in grey.

    Parameters
    ----------
    found : DataFrame
        As `attendance.condition_runs` gives it.
    shaded : DataFrame
        As `board.shaded` gives it.
    span : tuple of Timestamp
        First and last instant shown, UTC.
    zone : str
        IANA name of the plant's zone.
    ink : Ink
        Colours of the theme.

    Returns
    -------
    Chart
    """
    names = list(dict.fromkeys(found["instrument"]))
    begun, ended = (plant_time(pd.DatetimeIndex(found[one]), zone) for one in ("start", "end"))
    rows = found.assign(
        when=begun + " to " + ended,
        shape=found["kind"].map(SHAPES),
        middle=found["start"] + (found["end"] - found["start"]) / 2,
        room=(found["end"] - found["start"]) > ROOM * (span[1] - span[0]),
    )
    x = {"field": "start", **time_scale(*span, zone, title=True)}
    y: Spec = {"field": "instrument", "type": "nominal", "sort": names, "title": None}
    layers = [_down(ink), *(_kind(kind, x, y, ink) for kind in HEIGHTS), _shapes(y, ink)]
    spec = frame_spec(ink) | {"height": ROW_PX * len(names), "layer": layers}
    return Chart(spec, {"runs": rows, "down": shaded}, _alt(found, span, zone))


def _down(ink: Ink) -> Spec:
    return {
        "data": {"name": "down"},
        "mark": {"type": "rect", "color": ink.shade, "opacity": 0.2, "clip": True},
        "encoding": {
            "x": {"field": "start", "type": "temporal"},
            "x2": {"field": "end"},
            "tooltip": [{"field": "word", "title": "unit"}, {"field": "text", "title": "time"}],
        },
    }


def _kind(kind: str, x: Spec, y: Spec, ink: Ink) -> Spec:
    """The runs of one kind, at its own height."""
    colours = {
        GOOD: ink.series, DOUBTED: "#CC79A7", CALIBRATED: "#009E73", ABSENT: ink.quiet, REFUSED: ink.alarm,
    }  # fmt: skip
    empty = {"fillOpacity": 0, "stroke": colours[kind], "strokeWidth": 1.2} if kind == ABSENT else {}
    bar = {"type": "bar", "color": colours[kind], "height": {"band": HEIGHTS[kind]}, "clip": True, **empty}
    tip = [
        {"field": "instrument", "title": "instrument"},
        {"field": "condition", "title": "condition"},
        {"field": "when", "title": "time"},
    ]
    return {
        "data": {"name": "runs"},
        "transform": [{"filter": f"datum.kind == '{kind}'"}],
        "mark": bar,
        "encoding": {"x": x, "x2": {"field": "end"}, "y": y, "tooltip": tip},
    }


def _shapes(y: Spec, ink: Ink) -> Spec:
    """The shape of each run that has room for it."""
    return {
        "data": {"name": "runs"},
        "transform": [{"filter": f"datum.room && datum.kind != '{GOOD}'"}],
        "mark": {"type": "text", "color": ink.text, "fontSize": 11, "baseline": "middle"},
        "encoding": {"x": {"field": "middle", "type": "temporal"}, "y": y, "text": {"field": "shape"}},
    }


def _alt(found: pd.DataFrame, span: tuple[pd.Timestamp, pd.Timestamp], zone: str) -> str:
    """The sentence that stands for the chart."""
    out = found[found["kind"].isin([ABSENT, REFUSED])]
    names = ", ".join(dict.fromkeys(out["instrument"]))
    said = f"missing, stale or refused at times: {names}" if names else "none was missing, stale or refused"
    first, last = (wording.local_time(edge.to_pydatetime(), zone) for edge in span)
    count = found["instrument"].nunique()
    return f"Condition of {count} instruments from {first} to {last}: {said}."
