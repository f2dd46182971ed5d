"""The charts of a printed summary as Vega-Lite specifications of fixed size, and as inline SVG."""

from __future__ import annotations

import json
import re
from datetime import date
from typing import Any

import pandas as pd

from monitor.axes import LIGHT, Ink, Spec, frame_spec
from monitor.charts import DASHED
from monitor.summary.table import Summary, names
from monitor.windows import MODES

WIDTH, HEIGHT = 450, 108
FIRST = ("yield on feed", "selectivity on converted", "conversion")
FONT = "Arial, Helvetica, sans-serif"
SECOND = "#D55E00"  # of the Okabe-Ito set (2008), as the first series colour is
HOURS = {
    "running [h]": "#0072B2", "starting [h]": "#56B4E9", "turned down [h]": "#CC79A7",
    "down [h]": LIGHT.quiet, "not known [h]": "#b8c0c4", "no data [h]": LIGHT.grid,
}  # fmt: skip


def front(summary: Summary, *, ink: Ink = LIGHT) -> dict[str, Spec]:
    """Draw what is read first by day: the main figures, and the tonnes of the wanted product.

    Parameters
    ----------
    summary : Summary
    ink : Ink
        Colours of the theme.

    Returns
    -------
    dict of str to dict
        Specifications by their captions.
    """
    there = set(summary.tables["figures"]["figure"])
    specs = {
        f"{begun(name)} by day [%], steady with 95 % interval; open: as operated": figure_by_day(
            summary, name, targets(summary, name), ink=ink
        )
        for name in FIRST
        if name in there
    }
    made = [name for name in names(summary.tables["days"]) if name.endswith(" made [t]")][:1]
    return specs | {f"{begun(name)} by day": tonnes_by_day(summary, name, ink=ink) for name in made}


def begun(text: str) -> str:
    """Write a text with a capital at its beginning.

    Parameters
    ----------
    text : str

    Returns
    -------
    str
    """
    return text[:1].upper() + text[1:]


def figure_by_day(summary: Summary, figure: str, limits: dict[str, float], *, ink: Ink = LIGHT) -> Spec:
    """Draw one figure by day, steady with its half-width and as operated as open circles.

    Parameters
    ----------
    summary : Summary
    figure : str
        One of its figures.
    limits : dict of str to float
        What it is held against, drawn as dashed rules with their words.
    ink : Ink
        Colours of the theme.

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
    dot = {"filled": True, "size": 26, "color": ink.series}
    bar = {"type": "rule", "color": ink.series, "strokeWidth": 1.2}
    ring = {"type": "point", "color": ink.quiet, "size": 34, "strokeWidth": 1}
    line = {"type": "line", "color": ink.series, "strokeWidth": 1.6, "point": dot}
    layers = [
        {"mark": bar, "encoding": {"y": {"field": "low", **y}, "y2": {"field": "high"}}},
        {"mark": ring, "encoding": {"y": {"field": "operated", **y}}},
        {"mark": line, "encoding": {"y": {"field": "steady", **y}}},
    ]
    for word, value in limits.items():
        layers += _rule(word, value, ink)
    return _sized({"layer": layers, "encoding": {"x": _day(summary)}}, data, ink)


def targets(summary: Summary, figure: str) -> dict[str, float]:
    """Give budget and guarantee of a figure, by the words that are written at their rules.

    Parameters
    ----------
    summary : Summary
    figure : str
        One of its figures.

    Returns
    -------
    dict of str to float
        In the figure's unit.
    """
    table = summary.tables["comparisons"]
    stated = table[(table["figure"] == figure) & table["against"].isin(["budget", "guarantee"])]
    return {
        f"{against} {value:g}": value
        for against, value in zip(stated["against"], stated["steady there"], strict=True)
    }


def hours_by_day(summary: Summary, *, ink: Ink = LIGHT) -> Spec:
    """Draw how the hours of each day were spent.

    Parameters
    ----------
    summary : Summary
    ink : Ink
        Colours of the theme.

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
    inks = HOURS | {"down [h]": ink.quiet, "no data [h]": ink.grid}
    scale = {"domain": words, "range": [inks[name] for name in there]}
    return _sized(
        {
            "mark": {"type": "bar", "width": {"band": 0.8}},
            "encoding": {
                "x": _day(summary),
                "y": {"field": "hours", "type": "quantitative", "title": "h", "axis": {"tickCount": 4}},
                "color": {
                    "field": "what", "type": "nominal", "scale": scale,
                    "legend": {"orient": "bottom", "title": None, "labelColor": ink.quiet},
                },
                "order": {"field": "place"},
            },
        },
        data.assign(place=data["what"].map(words.index)),
        ink,
    )  # fmt: skip


def tonnes_by_day(summary: Summary, column: str, *, ink: Ink = LIGHT) -> Spec:
    """Draw the tonnes of one flow by day.

    Parameters
    ----------
    summary : Summary
    column : str
        Of its table of days.
    ink : Ink
        Colours of the theme.

    Returns
    -------
    dict
        Bars from zero.
    """
    data = summary.tables["days"][["day", column]].set_axis(["day", "tonnes"], axis=1)
    y = {"field": "tonnes", "type": "quantitative", "title": "t", "axis": {"tickCount": 4}}
    bar = {"type": "bar", "color": ink.series, "width": {"band": 0.7}}
    return _sized({"mark": bar, "encoding": {"x": _day(summary), "y": y}}, data, ink)


def closures_by_day(summary: Summary, *, ink: Ink = LIGHT) -> Spec:
    """Draw every closure by day with its half-width, about the line at 100 %.

    Parameters
    ----------
    summary : Summary
    ink : Ink
        Colours of the theme.

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
    inks = [ink.series, SECOND, "#009E73", "#CC79A7"]
    legend = {"orient": "bottom", "title": None, "labelColor": ink.quiet}
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
        *_rule("", 100.0, ink),
    ]
    apart = {"field": "what", "scale": {"domain": told, "paddingOuter": 0.5}}
    for layer in layers[:2]:
        layer["encoding"] |= {"x": _day(summary), "xOffset": apart}
    return _sized({"layer": layers}, data, ink)


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


def _rule(word: str, value: float, ink: Ink) -> list[dict[str, Any]]:
    """A dashed rule with its word at the left."""
    rule = {"type": "rule", "color": ink.alarm if word else ink.quiet, **DASHED}
    text = {
        "type": "text",
        "text": word,
        "align": "left",
        "baseline": "bottom",
        "dy": -2,
        "dx": 3,
        "fontSize": 10,
        "color": ink.alarm_text,
    }
    here = {"y": {"datum": value}}
    whole = {"data": {"values": [{}]}, "mark": rule, "encoding": {**here, "x": None, "xOffset": None}}
    words = {"data": {"values": [{}]}, "mark": text, "encoding": {**here, "x": {"value": 0}}}
    return [whole, words]


def _sized(spec: Spec, data: pd.DataFrame, ink: Ink) -> Spec:
    """Give a specification its size, fonts and data; missing numbers are null."""
    plain = frame_spec(ink)
    axis = {**plain["config"]["axis"], "labelFontSize": 10, "titleFontSize": 10}
    plain["config"] = {**plain["config"], "axis": axis, "font": FONT}
    plain |= {"width": WIDTH, "height": HEIGHT, "autosize": {"type": "pad"}}
    values = json.loads(data.to_json(orient="records"))
    return {**plain, **spec, "data": {"values": values}}
