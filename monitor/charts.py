"""Frames become Vega-Lite specifications, time axes in plant time; nothing here knows how they are shown.

A specification names its data sets; `Chart` carries both apart, so that new data under an unchanged
specification are patched in place.
"""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from datetime import timedelta
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from monitor import wording
from monitor.axes import Ink, Spec, frame_spec, microseconds, plant_time, time_scale
from monitor.series import Envelope, envelope

MOST_MARKS = 1_200  # of one line: a week of 10-min cells point by point
ROOM_PX = 24
DASHED: Spec = {"strokeDash": [6, 4], "strokeWidth": 1.5}
BROKEN: Spec = {"invalid": "break-paths-show-path-domains"}  # a hole stays a hole
WORDS_PX = 120  # a plot lower than this has no room for the words of an episode


@dataclass(frozen=True, slots=True)
class Chart:
    """A specification, the data sets it names, and the sentence that stands for it when it cannot be seen."""

    spec: Spec
    data: dict[str, pd.DataFrame]
    alt: str


def _when(line: Envelope, zone: str) -> NDArray[np.object_]:
    """Plant time of each point; of a bucket its beginning and its length."""
    begin = pd.to_datetime(line.middle - line.width_us // 2, unit="us", utc=True)
    length = f", {wording.duration(timedelta(microseconds=line.width_us))} long" if line.width_us else ""
    said: NDArray[np.object_] = plant_time(begin, zone) + length
    return said


def no_spans() -> pd.DataFrame:
    """Give spans of which there are none.

    Returns
    -------
    DataFrame
        Columns start, end, word, text.
    """
    never = pd.DatetimeIndex([], tz="UTC")
    return pd.DataFrame({"start": never, "end": never, "word": [], "text": []})


@dataclass(frozen=True, slots=True)
class Panel:
    """What one trend is about, where it lies in time, and what is drawn with the line."""

    title: str
    unit: str
    first: pd.Timestamp  # span shown, tz-aware UTC
    last: pd.Timestamp
    zone: str
    ink: Ink
    low: float | None = None  # limits [unit]
    high: float | None = None
    reference: float | None = None  # a value to compare with, such as a closure of 100 [unit]
    shaded: pd.DataFrame = field(default_factory=no_spans)
    episodes: pd.DataFrame = field(default_factory=no_spans)
    height: int = 220
    axis: bool = True  # whether the time axis names itself (the lowest of a stack does)
    brush: bool = False

    def resized(self, height: int, *, axis: bool, brush: bool) -> Panel:
        """Give the same panel in another shape.

        Parameters
        ----------
        height : int
            Of the plot [px].
        axis, brush : bool
            Whether the time axis names itself; whether a span can be drawn with the pointer.

        Returns
        -------
        Panel
        """
        return replace(self, height=height, axis=axis, brush=brush)


def drawn(frame: pd.DataFrame, panel: Panel, *, most: int = MOST_MARKS) -> pd.DataFrame:
    """Reduce a figure to what is drawn: mean, least and greatest per bucket, and its 95 % band.

    Parameters
    ----------
    frame : DataFrame, shape (t, >= 2)
        Columns `value` and `half_width` [panel's unit], NaN where missing; index of window ends, UTC.
    panel : Panel
        Gives the span.
    most : int
        Greatest number of rows wanted.

    Returns
    -------
    DataFrame
        Columns time, mean, low, high, band_low, band_high, half_width, when (plant time); NaN where a
        bucket holds no number.
    """
    time_us = microseconds(frame.index)
    value, half = frame["value"].to_numpy(float), frame["half_width"].to_numpy(float)
    # A figure without a known half-width is still drawn, with no band around it.
    known = np.where(np.isfinite(half), half, 0.0)
    first_us, last_us = microseconds(pd.DatetimeIndex([panel.first, panel.last]))
    reduced = [
        envelope(time_us, series, first_us=int(first_us), last_us=int(last_us), most=most)
        for series in (value, value - known, value + known, half)
    ]
    line, under, over, width = reduced
    time = pd.to_datetime(line.middle, unit="us", utc=True)
    return pd.DataFrame(
        {
            "time": time, "mean": line.mean, "low": line.low, "high": line.high,
            "band_low": under.low, "band_high": over.high, "half_width": width.mean,
            "when": _when(line, panel.zone),
        }
    )  # fmt: skip


def trend(line: pd.DataFrame, panel: Panel) -> Chart:
    """Draw one figure over time with its 95 % band, limits, episodes and the time that does not count.

    Parameters
    ----------
    line : DataFrame
        As `drawn` gives it.
    panel : Panel
        What is drawn with it.

    Returns
    -------
    Chart
        A brush named "brush" on the line when the panel asks for one.
    """
    layers = [
        *_shaded_layers(panel), _band(panel), _extremes(panel), *_rule_layers(panel),
        _line(panel), *_episode_layers(panel), _hover(line, panel),
    ]  # fmt: skip
    spec = frame_spec(panel.ink) | {"height": panel.height, "layer": layers}
    data = {
        "line": line,
        "shaded": _clipped(panel.shaded, panel),
        "episodes": _clipped(panel.episodes, panel),
    }
    return Chart(spec=spec | {"encoding": {"y": _value_axis(line, panel)}}, data=data, alt=_alt(line, panel))


def _value_axis(line: pd.DataFrame, panel: Panel) -> Spec:
    """Span what is drawn and every limit, with a little air; never start at zero for its own sake."""
    fixed = [v for v in (panel.low, panel.high, panel.reference) if v is not None]
    extremes = line[["low", "high"]].to_numpy(float).ravel()
    # A band that is wide for an hour after a start must not flatten the rest: it may be cut by the frame.
    bands = line[["band_low", "band_high"]].quantile([0.02, 0.98]).to_numpy(float).ravel()
    shown = np.concatenate([extremes, bands, np.asarray(fixed, float)])
    shown = shown[np.isfinite(shown)]
    low, high = (float(shown.min()), float(shown.max())) if shown.size else (0.0, 1.0)
    air = 0.08 * (high - low) or max(abs(high) * 0.01, 0.5)
    # The bar of an episode and a limit's word need room above the highest rule.
    top = max(air, (high - low) * ROOM_PX / (panel.height - ROOM_PX)) if len(panel.episodes) else air
    return {
        "type": "quantitative",
        "title": None,
        "scale": {"zero": False, "nice": False, "domain": [low - air, high + top]},
        "axis": {"tickCount": 4, "minExtent": 46, "maxExtent": 46, "ticks": False, "labelPadding": 6},
    }


def _layer(data: str, mark: Spec, encoding: Spec, **more: Any) -> Spec:
    """One layer on a named data set, cut at the frame."""
    return {"data": {"name": data}, "mark": {"clip": True, **mark}, "encoding": encoding, **more}


def _fixed(mark: Spec, encoding: Spec) -> Spec:
    """One mark that needs no data."""
    return {"data": {"values": [{}]}, "mark": mark, "encoding": encoding}


def _at(field: str) -> Spec:
    """The time channel of every layer but the one that carries the axis."""
    return {"field": field, "type": "temporal"}


def _band(panel: Panel) -> Spec:
    """The 95 % band; the layer that carries the domain has no x2, or the domain would be lost."""
    x = {"field": "time", **time_scale(panel.first, panel.last, panel.zone, title=panel.axis)}
    encoding = {"x": x, "y": {"field": "band_low"}, "y2": {"field": "band_high"}}
    return _layer("line", {"type": "area", "color": panel.ink.series, "opacity": 0.16}, encoding)


def _extremes(panel: Panel) -> Spec:
    """Least to greatest of each bucket, so that no spike is lost in the mean."""
    encoding = {"x": _at("time"), "y": {"field": "low"}, "y2": {"field": "high"}}
    return _layer("line", {"type": "area", "color": panel.ink.series, "opacity": 0.38}, encoding)


def _line(panel: Panel) -> Spec:
    """The mean; a brush must sit on this layer."""
    style = {"type": "line", "color": panel.ink.series, "strokeWidth": 1.8, "strokeCap": "round", **BROKEN}
    layer = _layer("line", style, {"x": _at("time"), "y": {"field": "mean"}})
    if panel.brush:
        mark = {"fill": panel.ink.series, "fillOpacity": 0.15, "stroke": panel.ink.series}
        select = {"type": "interval", "encodings": ["x"], "mark": mark}
        layer["params"] = [{"name": "brush", "select": select}]
    return layer


def _rule_layers(panel: Panel) -> list[Spec]:
    """Limits as dashed rules with their words, the reference as a thin solid one."""
    rules: list[Spec] = []
    if panel.reference is not None:
        mark = {"type": "rule", "color": panel.ink.quiet, "strokeWidth": 1}
        rules.append(_fixed(mark, {"y": {"datum": panel.reference}}))
    for side, limit in (("low", panel.low), ("high", panel.high)):
        if limit is not None:
            rules.extend(_limit(side, limit, panel))
    return rules


def _limit(side: str, limit: float, panel: Panel) -> list[Spec]:
    """One limit: a dashed rule, its word at the left edge on the inner side of the rule."""
    base, shift = ("bottom", -3) if side == "low" else ("top", 4)
    word = {"type": "text", "text": f"{side} {wording.plain(limit)}", "color": panel.ink.alarm_text}
    place = {"align": "left", "baseline": base, "dx": 4, "dy": shift, "fontSize": 12}
    y = {"y": {"datum": limit}}
    rule = {"type": "rule", "color": panel.ink.alarm, **DASHED}
    return [_fixed(rule, y), _fixed({**word, **place}, {"x": {"value": 0}, **y})]


def _span(low_px: float, high_px: float) -> Spec:
    """From start to end of a span, between two heights."""
    return {"x": _at("start"), "x2": {"field": "end"}, "y": {"value": low_px}, "y2": {"value": high_px}}


def _shaded_layers(panel: Panel) -> list[Spec]:
    """Time that does not count, as a grey field with its word where there is room for it."""
    tip = [{"field": "word", "title": "unit"}, {"field": "text", "title": "time"}]
    field = {"type": "rect", "color": panel.ink.shade, "opacity": 0.2}
    word = {"type": "text", "color": panel.ink.quiet, "baseline": "top", "fontSize": 12}
    place = {"x": _at("middle"), "y": {"value": panel.height / 2}, "text": {"field": "word"}}
    return [
        _layer("shaded", field, {**_span(0, panel.height), "tooltip": tip}),
        _layer("shaded", word, place, transform=[{"filter": "datum.room"}]),
    ]


def _episode_layers(panel: Panel) -> list[Spec]:
    """Episodes as a bar along the top edge, from raised to cleared, with their word."""
    tip = [{"field": "text", "title": "episode"}]
    bar, field = ({"type": "rect", "color": panel.ink.alarm, "opacity": part} for part in (0.95, 0.09))
    word = {"type": "text", "color": panel.ink.alarm_text, "align": "right", "baseline": "top"}
    place = {"x": _at("end"), "y": {"value": 10}, "text": {"field": "word"}}
    room = [{"filter": f"datum.room && {panel.height} >= {WORDS_PX}"}]
    return [
        _layer("episodes", bar, {**_span(0, 6), "tooltip": tip}),
        _layer("episodes", field, _span(0, panel.height)),
        _layer("episodes", {**word, "dx": -4, "fontSize": 12}, place, transform=room),
    ]


def _hover(line: pd.DataFrame, panel: Panel) -> Spec:
    """A point that follows the pointer and tells time, value and half-width."""
    form = f".{_places(line)}f"
    unit = f" [{panel.unit}]" if panel.unit else ""
    named = {
        "mean": f"{panel.title}{unit}", "half_width": "half-width (95 %)", "low": "least", "high": "greatest",
    }  # fmt: skip
    tip: list[Spec] = [{"field": "when", "title": "plant time"}]
    tip += [{"field": field, "title": title, "format": form} for field, title in named.items()]
    select = {"type": "point", "on": "pointermove", "nearest": True, "clear": "pointerout"}
    shown = {"condition": {"param": "near", "empty": False, "value": 1}, "value": 0}
    return _layer(
        "line",
        {"type": "point", "filled": True, "size": 60, "color": panel.ink.series},
        {"x": _at("time"), "y": {"field": "mean"}, "opacity": shown, "tooltip": tip},
        params=[{"name": "near", "select": select}],
        transform=[{"filter": "isValid(datum.mean)"}],
    )


def _places(line: pd.DataFrame) -> int:
    """Decimals for tooltips: two significant digits of the usual half-width, else of the spread."""
    half = line["half_width"].to_numpy(float)
    half = half[np.isfinite(half) & (half > 0)]
    return max(wording.decimals_for(float(np.median(half))), 0) if half.size else 2


def _clipped(spans: pd.DataFrame, panel: Panel) -> pd.DataFrame:
    """Cut spans to what is shown and find out which have room for their word (15 % of the width).

    Words of spans that end together would stand on one another: the first of them bears all.
    """
    kept = spans[(spans["end"] > panel.first) & (spans["start"] < panel.last)]
    start = pd.DatetimeIndex(kept["start"]).as_unit("us")
    end = pd.DatetimeIndex(kept["end"]).as_unit("us")
    start, end = start.where(start > panel.first, panel.first), end.where(end < panel.last, panel.last)
    length = end - start
    text = kept["text"].to_numpy(object)
    room = np.asarray(length > 0.15 * (panel.last - panel.first))
    word = kept["word"].where(room)
    joined = word.groupby(end).transform(lambda words: "; ".join(dict.fromkeys(words.dropna())))
    room &= ~pd.Series(end.where(room)).duplicated().to_numpy()
    shown = joined.where(room, kept["word"]).to_numpy(object)
    return pd.DataFrame(
        {"start": start, "end": end, "middle": start + length / 2, "word": shown, "text": text, "room": room}
    )


def _alt(line: pd.DataFrame, panel: Panel) -> str:
    """The sentence that stands for the chart."""
    span = (
        f"from {wording.local_time(panel.first, panel.zone)} to {wording.local_time(panel.last, panel.zone)}"
    )
    there = line.dropna(subset=["mean"])
    if there.empty:
        return f"Trend of {panel.title} {span}: nothing to show."
    places = _places(line)
    low, high = (wording.number(float(v), places) for v in (there["low"].min(), there["high"].max()))
    last = wording.number(float(there["mean"].iloc[-1]), places)
    bounds = wording.limits(panel.low, panel.high, panel.unit)
    reach = f"between {low} and {high} {panel.unit}, last {last}"
    return f"Trend of {panel.title} {span}: {reach}; limits: {bounds}."


def fit(line: pd.DataFrame, bound: pd.DataFrame, panel: Panel) -> Chart:
    """Draw the objective per degree of freedom with the chi-square bound of every cell.

    Parameters
    ----------
    line : DataFrame
        As `drawn` gives it.
    bound : DataFrame
        The bound over the same span, as `drawn` gives it.
    panel : Panel
        What is drawn with it.

    Returns
    -------
    Chart
        The bound is a dashed step in the ink of limits.
    """
    both = pd.concat([line, bound.drop(columns="half_width")], ignore_index=True)
    chart = trend(line, panel)
    style = {"type": "line", "interpolate": "step-after", "color": panel.ink.alarm, **DASHED, **BROKEN}
    dashed = _layer("bound", style, {"x": _at("time"), "y": {"field": "mean"}})
    layers = [*chart.spec["layer"], dashed]
    spec = chart.spec | {"layer": layers, "encoding": {"y": _value_axis(both, panel)}}
    return Chart(spec, chart.data | {"bound": bound}, chart.alt)


def adjustment_strip(table: pd.DataFrame, ink: Ink) -> Chart:
    """Draw how far every instrument was adjusted, over the reach that it should stay in.

    Parameters
    ----------
    table : DataFrame
        As `witnesses.adjustments` gives it.
    ink : Ink
        Colours of the theme.

    Returns
    -------
    Chart
        One line per instrument: pale bar for the expected reach, thin bar for 90 % of the cells, a point
        for the mean; what stands out is a triangle in the alarm colour.
    """
    rows = table.reset_index(names="instrument").assign(under=-table["expected"].to_numpy())
    shown = rows[rows["mean"].notna()].reset_index(drop=True)
    widest = float(shown[["low", "high", "expected"]].abs().max().max()) if len(shown) else 2.0
    reach = max(widest * 1.05, 2.5)
    y = {"field": "instrument", "type": "nominal", "sort": None, "title": None}
    x = {
        "type": "quantitative",
        "scale": {"domain": [-reach, reach], "nice": False},
        "title": "adjustment in standard uncertainties",
        "axis": {"tickCount": 7},
    }
    tip = [
        {"field": "instrument", "title": "instrument"},
        {"field": "mean", "title": "mean adjustment", "format": "+.2f"},
        {"field": "expected", "title": "expected within", "format": ".2f"},
        {"field": "share", "title": "cells present", "format": ".0%"},
        {"field": "word", "title": "verdict of the balance"},
    ]
    alarm = {"test": "datum.word == 'stands out'", "value": ink.alarm}
    point = {
        "mark": {"type": "point", "filled": True, "size": 90, "opacity": 1, "strokeWidth": 1.5},
        "encoding": {
            "y": y, "x": {**x, "field": "mean"}, "tooltip": tip,
            "color": {"condition": alarm, "value": ink.series},
            "shape": {"condition": {"test": alarm["test"], "value": "triangle-up"}, "value": "circle"},
            "fillOpacity": {"condition": {"test": "datum.word == 'not redundant'", "value": 0}, "value": 1},
            "stroke": {"condition": alarm, "value": ink.series},
        },
    }  # fmt: skip
    layers = [
        _bar("under", "expected", y, x, {"color": ink.shade, "opacity": 0.22, "height": {"band": 0.72}}),
        _bar("low", "high", y, x, {"color": ink.series, "opacity": 0.45, "height": {"band": 0.26}}),
        {
            "mark": {"type": "rule", "color": ink.quiet},
            "encoding": {"x": {"datum": 0}},
            "data": {"values": [{}]},
        },
        point,
    ]
    out = shown.loc[shown["word"] == "stands out", "instrument"].tolist()
    said = f"{', '.join(out)} stand out" if out else "none stands out"
    alt = f"Mean adjustment of {len(shown)} instruments in their standard uncertainties: {said}."
    spec = frame_spec(ink) | {
        "height": 26 * max(len(shown), 1),
        "data": {"name": "adjusted"},
        "layer": layers,
    }
    return Chart(spec, {"adjusted": shown}, alt)


def _bar(low: str, high: str, y: Spec, x: Spec, mark: Spec) -> Spec:
    """A horizontal bar from one column to another."""
    return {
        "mark": {"type": "bar", **mark},
        "encoding": {"y": y, "x": {**x, "field": low}, "x2": {"field": high}},
    }
