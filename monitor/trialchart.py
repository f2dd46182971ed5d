"""The curve of a trial: false alerts a month against the delay, limit by limit."""

from __future__ import annotations

import math
from collections.abc import Sequence

import pandas as pd

from monitor import wording
from monitor.axes import Ink, Spec, frame_spec
from monitor.charts import Chart
from monitor.trials import Point

HEIGHT = 260


def chart(points: Sequence[Point], unit: str, ink: Ink) -> Chart:
    """Draw what other limits would have cost: false alerts a month against mean delay.

    Parameters
    ----------
    points : sequence of Point
        From the tightest limits to the widest.
    unit : str
        Of the figure.
    ink : Ink
        Colours of the theme.

    Returns
    -------
    Chart
        Against the limit itself where nothing is known that could have been caught.
    """
    frame = _frame(points, unit)
    known = bool(frame["delay_h"].notna().any())
    across = ("delay_h", "mean delay of what was caught [h]") if known else ("limit", f"limit [{unit}]")
    shown = frame.dropna(subset=[across[0], "false_per_month"]).reset_index(drop=True)
    spec = frame_spec(ink) | {"height": HEIGHT, "layer": _layers(across, ink)}
    asked = frame.loc[frame["asked"], ["words", "false", "delay"]].to_numpy().tolist()
    said = "; ".join(f"{words}: {false} false a month, {delay}" for words, false, delay in asked)
    return Chart(
        spec, {"trial": shown}, f"False alerts a month against {across[1]} for {len(shown)} limits; {said}."
    )


def _frame(points: Sequence[Point], unit: str) -> pd.DataFrame:
    """The points with what is told of each."""
    return pd.DataFrame(
        {
            "limit": [one.low if one.low is not None else one.high for one in points],
            "words": [wording.limits(one.low, one.high, unit) for one in points],
            "false_per_month": [one.false_per_month for one in points],
            "delay_h": [one.delay_h for one in points],
            "delay": [
                "nothing caught" if math.isnan(one.delay_h) else f"{one.delay_h:.1f} h" for one in points
            ],
            "false": [f"{one.false_per_month:.2f}" for one in points],
            "caught": [f"{one.caught} of {one.caught + one.missed}" for one in points],
            "all_caught": [one.missed == 0 for one in points],
            "asked": [one.is_asked for one in points],
        }
    )


def _layers(across: tuple[str, str], ink: Ink) -> list[Spec]:
    """A line through the limits, a point for each, and the one asked for with its words."""
    x = {"field": across[0], "type": "quantitative", "title": across[1], "scale": {"zero": False}}
    y = {"field": "false_per_month", "type": "quantitative", "title": "false alerts a month of running"}
    tip = [
        {"field": name, "title": title}
        for name, title in (
            ("words", "limits"), ("false", "false a month"), ("delay", "mean delay"),
            ("caught", "known events caught"),
        )
    ]  # fmt: skip
    place = {"x": x, "y": y, "tooltip": tip}
    line = {"type": "line", "color": ink.series, "opacity": 0.5, "strokeWidth": 1.5}
    point = {"type": "point", "color": ink.series, "size": 60, "strokeWidth": 1.5}
    asked = {
        "type": "point",
        "color": ink.alarm,
        "shape": "diamond",
        "size": 170,
        "filled": True,
        "opacity": 1,
    }
    word = {"type": "text", "color": ink.text, "align": "left", "dx": 12, "dy": -14, "fontSize": 12}
    full = {"condition": {"test": "datum.all_caught", "value": ink.series}, "value": "transparent"}
    only = [{"filter": "datum.asked"}]
    data = {"data": {"name": "trial"}}
    return [
        {**data, "mark": line, "encoding": {"x": x, "y": y, "order": {"field": "limit"}}},
        {**data, "mark": point, "encoding": {**place, "fill": full}},
        {**data, "mark": asked, "encoding": place, "transform": only},
        {**data, "mark": word, "encoding": {"x": x, "y": y, "text": {"field": "words"}}, "transform": only},
    ]
