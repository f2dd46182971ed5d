"""The charts of a printed summary as Vega-Lite specifications of fixed size, and as inline SVG."""

from __future__ import annotations

import json
import re
from datetime import date
from typing import Any

import pandas as pd

from monitor.axes import LIGHT, Spec, frame_spec
from monitor.charts import DASHED
from monitor.summary.table import Summary, names
from monitor.windows import MODES

WIDTH, HEIGHT = 450, 108
FONT = "Arial, Helvetica, sans-serif"
SECOND = "#D55E00"  # of the Okabe-Ito set (2008), as the first series colour is
HOURS = {
    "running [h]": "#0072B2", "starting [h]": "#56B4E9", "turned down [h]": "#CC79A7", "down [h]": "#4f5d66",
    "not known [h]": "#b8c0c4", "no data [h]": "#e2e6e4",
}  # fmt: skip


def figure_by_day(summary: Summary, figure: str, limits: dict[str, float]) -> Spec:
    """Draw one figure by day, steady with its half-width and as operated as open circles.

    Parameters
    ----------
    summary : Summary
    figure : str
        One of its figures.
    limits : dict of str to float
        What it is held against, drawn as dashed rules with their words.

    Returns
    -------
    dict
        A specification with its data.
    """
    table = summary.tables["figures by day"]
    titles = {mode: _columns(table, figure, mode) for mode in MODES}
    steady, width = titles["steady"]
    data = pd.DataFrame(
        {
            "day": table["day"],
            "steady": table[steady],
            "low": table[steady] - table[width],
            "high": table[steady] + table[width],
            "operated": table[titles["as operated"][0]],
        }
    )
    y = {"type": "quantitative", "scale": {"zero": False}, "title": None, "axis": {"tickCount": 4}}
    dot = {"filled": True, "size": 26, "color": LIGHT.series}
    bar = {"type": "rule", "color": LIGHT.series, "strokeWidth": 1.2}
    ring = {"type": "point", "color": LIGHT.quiet, "size": 34, "strokeWidth": 1}
    line = {"type": "line", "color": LIGHT.series, "strokeWidth": 1.6, "point": dot}
    layers = [
        {"mark": bar, "encoding": {"y": {"field": "low", **y}, "y2": {"field": "high"}}},
        {"mark": ring, "encoding": {"y": {"field": "operated", **y}}},
        {"mark": line, "encoding": {"y": {"field": "steady", **y}}},
    ]
    for word, value in limits.items():
        layers += _rule(word, value)
    return _sized({"layer": layers, "encoding": {"x": _day(summary)}}, data)


def hours_by_day(summary: Summary) -> Spec:
    """Draw how the hours of each day were spent.

    Parameters
    ----------
    summary : Summary

    Returns
    -------
    dict
        Stacked bars; every colour is named in the legend.
    """
    days = summary.tables["days"]
    there = [name for name in HOURS if days[name].any()]
    data = days.melt("day", there, "what", "hours")
    data["what"] = data["what"].str.removesuffix(" [h]")
    words = [name.removesuffix(" [h]") for name in there]
    scale = {"domain": words, "range": [HOURS[name] for name in there]}
    return _sized(
        {
            "mark": {"type": "bar", "width": {"band": 0.8}},
            "encoding": {
                "x": _day(summary),
                "y": {"field": "hours", "type": "quantitative", "title": "h", "axis": {"tickCount": 4}},
                "color": {
                    "field": "what", "type": "nominal", "scale": scale,
                    "legend": {"orient": "bottom", "title": None, "labelColor": LIGHT.quiet},
                },
                "order": {"field": "place"},
            },
        },
        data.assign(place=data["what"].map(words.index)),
    )  # fmt: skip


def tonnes_by_day(summary: Summary, column: str) -> Spec:
    """Draw the tonnes of one flow by day.

    Parameters
    ----------
    summary : Summary
    column : str
        Of its table of days.

    Returns
    -------
    dict
        Bars from zero.
    """
    data = summary.tables["days"][["day", column]].set_axis(["day", "tonnes"], axis=1)
    y = {"field": "tonnes", "type": "quantitative", "title": "t", "axis": {"tickCount": 4}}
    bar = {"type": "bar", "color": LIGHT.series, "width": {"band": 0.7}}
    return _sized({"mark": bar, "encoding": {"x": _day(summary), "y": y}}, data)


def closures_by_day(summary: Summary) -> Spec:
    """Draw every closure by day with its half-width, about the line at 100 %.

    Parameters
    ----------
    summary : Summary

    Returns
    -------
    dict
        One colour and one shape per closure.
    """
    table = summary.tables["balances"]
    columns = names(table)
    told = [name.removesuffix(" [%]") for name in columns if name.endswith("closure [%]")]
    pieces = [
        pd.DataFrame(
            {
                "day": table["day"],
                "value": table[f"{name} [%]"],
                "width": table[f"{name} ± [%]"],
                "what": name,
            }
        )
        for name in told
    ]
    data = pd.concat(pieces) if pieces else pd.DataFrame({"day": [], "value": [], "width": [], "what": []})
    data = data.assign(low=data["value"] - data["width"], high=data["value"] + data["width"])
    y = {"type": "quantitative", "scale": {"zero": False}, "title": None, "axis": {"tickCount": 4}}
    inks = [LIGHT.series, SECOND, "#009E73", "#CC79A7"]
    legend = {"orient": "bottom", "title": None, "labelColor": LIGHT.quiet}
    colour = {
        "field": "what",
        "type": "nominal",
        "legend": legend,
        "scale": {"domain": told, "range": inks[: len(told)]},
    }
    shape = {**colour, "scale": {"domain": told}}
    layers = [
        {
            "mark": {"type": "rule", "strokeWidth": 1, "opacity": 0.45},
            "encoding": {"y": {"field": "low", **y}, "y2": {"field": "high"}, "color": colour},
        },
        {
            "mark": {"type": "point", "filled": True, "size": 30},
            "encoding": {"y": {"field": "value", **y}, "color": colour, "shape": shape},
        },
        *_rule("", 100.0),
    ]
    apart = {"field": "what", "scale": {"domain": told, "paddingOuter": 0.5}}
    for layer in layers[:2]:
        layer["encoding"] |= {"x": _day(summary), "xOffset": apart}
    return _sized({"layer": layers}, data)


def svg(spec: Spec, name: str) -> str:
    """Turn a specification into SVG that may stand in a page beside others.

    Parameters
    ----------
    spec : dict
        With its data.
    name : str
        Letters; put before every id, so that no two pictures of a page share one.

    Returns
    -------
    str
    """
    import vl_convert

    text: str = vl_convert.vegalite_to_svg(spec)
    text = re.sub(r'\bid="([^"]+)"', rf'id="{name}-\1"', text)
    return re.sub(r"url\(#([^)]+)\)", rf"url(#{name}-\1)", text)


def _columns(table: pd.DataFrame, figure: str, mode: str) -> tuple[str, str]:
    """Columns of a figure's value and half-width in the table by day."""
    head = f"{figure} | {mode} | "
    value = next(name for name in names(table) if name.startswith(head) and not name.endswith("±"))
    return value, f"{head}±"


def _day(summary: Summary) -> dict[str, Any]:
    """The axis of days: ordinal, so that no clock moves them; every fifth is labelled."""
    days = list(summary.tables["days"]["day"])
    step = max(1, -(-len(days) // 7))
    labels = {day: f"{date.fromisoformat(day):%d %b}".lstrip("0") for day in days[::step]}
    label = f"({json.dumps(labels)})[datum.value]"
    axis = {"labelExpr": label, "values": days[::step], "labelAngle": 0, "title": None, "grid": False}
    return {"field": "day", "type": "ordinal", "scale": {"domain": days}, "axis": axis}


def _rule(word: str, value: float) -> list[dict[str, Any]]:
    """A dashed rule with its word at the left."""
    rule = {"type": "rule", "color": LIGHT.alarm if word else LIGHT.quiet, **DASHED}
    text = {
        "type": "text",
        "text": word,
        "align": "left",
        "baseline": "bottom",
        "dy": -2,
        "dx": 3,
        "fontSize": 10,
        "color": LIGHT.alarm_text,
    }
    here = {"y": {"datum": value}}
    whole = {"data": {"values": [{}]}, "mark": rule, "encoding": {**here, "x": None, "xOffset": None}}
    words = {"data": {"values": [{}]}, "mark": text, "encoding": {**here, "x": {"value": 0}}}
    return [whole, words]


def _sized(spec: Spec, data: pd.DataFrame) -> Spec:
    """Give a specification its size, fonts and data; missing numbers are null."""
    plain = frame_spec(LIGHT)
    axis = {**plain["config"]["axis"], "labelFontSize": 10, "titleFontSize": 10}
    plain["config"] = {**plain["config"], "axis": axis, "font": FONT}
    plain |= {"width": WIDTH, "height": HEIGHT, "autosize": {"type": "pad"}}
    values = json.loads(data.to_json(orient="records"))
    return {**plain, **spec, "data": {"values": values}}
