from __future__ import annotations

import json
from typing import Any

import altair as alt
import numpy as np
import pandas as pd
import pytest

from monitor import axes, charts, witnesses
from monitor.charts import Chart, Panel
from monitor.page.launch import THEMES

BERLIN = "Europe/Berlin"
END = pd.Timestamp("2026-04-14T12:20Z")


def made_frame(days: float, *, step: str = "10min", end: pd.Timestamp = END) -> pd.DataFrame:
    index = pd.date_range(end - pd.Timedelta(days=days), end, freq=step, name="end")
    return pd.DataFrame({"value": 76 + np.sin(np.arange(len(index)) / 40), "half_width": 0.4}, index=index)


def made_panel(days: float, **changes: Any) -> Panel:
    settings = {"title": "Yield on feed", "unit": "%", "zone": BERLIN, "ink": axes.LIGHT, "low": 75.0}
    return Panel(first=END - pd.Timedelta(days=days), last=END, **settings | changes)


def made_spans(word: str) -> pd.DataFrame:
    return pd.DataFrame(
        {"start": [END - pd.Timedelta(hours=9)], "end": [END], "word": [word], "text": ["why"]}
    )


def made_trend(days: float = 7, **changes: Any) -> Chart:
    panel = made_panel(days, **changes)
    return charts.trend(charts.drawn(made_frame(days), panel), panel)


def made_strip(ink: axes.Ink = axes.LIGHT) -> Chart:
    adjustment = pd.DataFrame(
        {"FI-1": [0.1, 0.2], "FI-2": [3.0, 3.2], "AI-1": [np.nan, np.nan], "AI-2": [0.0, 0.0]}
    )
    spread = pd.DataFrame(
        {"FI-1": [0.8, 0.8], "FI-2": [0.7, 0.7], "AI-1": [np.nan, np.nan], "AI-2": [0.0, 0.0]}
    )
    return charts.adjustment_strip(witnesses.adjustments(adjustment, spread), ink)


def made_fit() -> Chart:
    panel = made_panel(7, low=None)
    line = charts.drawn(made_frame(7), panel)
    return charts.fit(line, line, panel)


@pytest.mark.parametrize(
    "chart",
    [
        made_trend(),
        made_trend(
            brush=True, high=80.0, reference=76.0, shaded=made_spans("down"), episodes=made_spans("below")
        ),
        made_fit(),
        made_strip(),
        made_strip(axes.DARK),
    ],
    ids=["plain", "with everything", "fit", "adjustments", "dark"],
)
def test_a_specification_is_valid_vega_lite_and_names_only_data_that_it_carries(chart: Chart):
    # Altair validates against the published Vega-Lite JSON schema.
    alt.LayerChart.from_dict(chart.spec | {"datasets": {name: [{}] for name in chart.data}})
    layers = [chart.spec, *chart.spec["layer"]]
    named = {layer["data"]["name"] for layer in layers if "name" in layer.get("data", {})}
    assert named == set(chart.data)


def test_new_data_under_the_same_span_leave_the_specification_unchanged():
    # Else the chart is built anew at every refresh, which flickers and loses the zoom.
    panel = made_panel(7)
    frame = made_frame(7)
    first = charts.trend(charts.drawn(frame, panel), panel)
    moved = charts.trend(charts.drawn(frame.assign(value=frame["value"][::-1].to_numpy()), panel), panel)
    assert json.dumps(first.spec) == json.dumps(moved.spec)
    assert not first.data["line"].equals(moved.data["line"])


def test_a_year_of_minutes_is_drawn_with_at_most_2000_marks_and_keeps_its_spike():
    frame = made_frame(365, step="1min")
    frame.iloc[200_000, 0] = 12.5
    line = charts.drawn(frame, made_panel(365))
    assert len(line) <= 2000
    assert line["low"].min() == 12.5


def test_drawing_leaves_the_figures_alone():
    frame = made_frame(30)
    before = frame.copy()
    made_panel(30)
    charts.trend(charts.drawn(frame, made_panel(30)), made_panel(30))
    pd.testing.assert_frame_equal(frame, before)


def domain(chart: Chart) -> list[float]:
    return chart.spec["encoding"]["y"]["scale"]["domain"]


def test_limits_and_reference_lie_inside_what_is_shown():
    low, high = domain(made_trend(low=60.0, high=90.0, reference=100.0))
    assert low < 60
    assert high > 100


def test_the_scale_does_not_start_at_zero_for_its_own_sake():
    low, high = domain(made_trend())
    assert low > 70
    assert high < 80


def test_nothing_to_draw_still_gives_a_chart_that_says_so():
    panel = made_panel(7, low=None)
    chart = charts.trend(charts.drawn(made_frame(7) * np.nan, panel), panel)
    assert "nothing to show" in chart.alt
    alt.LayerChart.from_dict(chart.spec | {"datasets": {name: [{}] for name in chart.data}})


def test_the_sentence_for_those_who_cannot_see_it_holds_span_range_last_value_and_limits():
    said = made_trend().alt
    for part in (
        "Yield on feed",
        "7 Apr 2026 14:20 CEST",
        "14 Apr 2026 14:20 CEST",
        "75.00",
        "77.00",
        "at least 75.0 %",
    ):
        assert part in said


def test_spans_are_cut_to_what_is_shown_and_only_wide_ones_bear_their_word():
    spans = pd.DataFrame(
        {
            "start": [END - pd.Timedelta(days=9), END - pd.Timedelta(hours=1), END + pd.Timedelta(days=1)],
            "end": [END - pd.Timedelta(days=4), END, END + pd.Timedelta(days=2)],
            "word": ["down", "down", "down"],
            "text": ["a", "b", "c"],
        }
    )
    kept = made_trend(shaded=spans).data["shaded"]
    assert kept["text"].tolist() == ["a", "b"]
    assert kept["room"].tolist() == [True, False]
    assert kept["start"].iloc[0] == END - pd.Timedelta(days=7)


def test_episodes_that_end_together_bear_their_words_in_one_place():
    spans = pd.concat([made_spans("below 81.0"), made_spans("below the 82.38 expected")], ignore_index=True)
    drawn = made_trend(days=1, episodes=spans).data["episodes"]
    assert list(drawn["room"]) == [True, *[False] * (len(drawn) - 1)]
    assert drawn["word"][0] == "below 81.0; below the 82.38 expected"


def test_axis_labels_are_plant_time_through_the_doubled_hour():
    # Directive 2000/84/EC: on 25 Oct 2026 in Berlin the hour from 02:00 comes twice, at 00:00Z and at 01:00Z.
    first, last = pd.Timestamp("2026-10-24T22:00Z"), pd.Timestamp("2026-10-25T05:00Z")
    found = axes.ticks(first, last, BERLIN, most=9)
    assert found[0] == ("2026-10-24T22:00:00Z", "25 Oct")
    assert [label for at, label in found if at in ("2026-10-25T00:00:00Z", "2026-10-25T01:00:00Z")] == [
        "02:00",
        "02:00",
    ]
    assert found[-1] == ("2026-10-25T05:00:00Z", "06:00")


def test_axis_days_are_plant_midnights_through_the_clock_change():
    # By hand: midnight in Berlin is 23:00Z in winter, 22:00Z in summer; forward on 29 Mar 2026.
    first, last = pd.Timestamp("2026-03-27T12:00Z"), pd.Timestamp("2026-03-31T12:00Z")
    found = axes.ticks(first, last, BERLIN, most=9)
    midnights = [at for at, label in found if not label.endswith("00")]
    assert midnights == [f"2026-03-{d}T{h}:00:00Z" for d, h in ((27, 23), (28, 23), (29, 22), (30, 22))]


@pytest.mark.parametrize("days", [0.1, 1, 3, 7, 30, 90, 365, 3650])
def test_an_axis_has_few_labels_at_every_span(days: float):
    found = axes.ticks(END - pd.Timedelta(days=days), END, BERLIN, most=9)
    assert 2 <= len(found) <= 10
    assert all(at.endswith("Z") for at, _ in found)


def test_a_tooltip_of_a_bucket_tells_its_beginning_and_length():
    line = charts.drawn(made_frame(30), made_panel(30))
    # 30 d in 1,200 buckets: 36 min are needed, an hour is the next named width.
    assert line["when"].iloc[1] == "15 Mar 2026 14:00 CET, 1 h long"
    assert charts.drawn(made_frame(1), made_panel(1))["when"].iloc[-1] == "14 Apr 2026 14:20 CEST"


def luminance(colour: str) -> float:
    # WCAG 2.2, definition of relative luminance.
    parts = [int(colour[i : i + 2], 16) / 255 for i in (1, 3, 5)]
    linear = [p / 12.92 if p <= 0.04045 else ((p + 0.055) / 1.055) ** 2.4 for p in parts]
    return float(np.dot(linear, [0.2126, 0.7152, 0.0722]))


def contrast(one: str, other: str) -> float:
    high, low = sorted((luminance(one), luminance(other)), reverse=True)
    return (high + 0.05) / (low + 0.05)


def test_the_contrast_formula_gives_the_published_extremes():
    # WCAG 2.2, definition of contrast ratio: from 1:1 to 21:1.
    assert contrast("#ffffff", "#000000") == pytest.approx(21)


@pytest.mark.parametrize(
    ("ink", "theme"), [(axes.LIGHT, "light"), (axes.DARK, "dark")], ids=["light", "dark"]
)
def test_words_reach_4_5_to_1_and_lines_3_to_1_on_their_background(ink: axes.Ink, theme: str):
    # WCAG 2.2, 1.4.3 (text) and 1.4.11 (graphical objects).
    paper = THEMES[theme]["backgroundColor"]
    assert min(contrast(colour, paper) for colour in (ink.text, ink.quiet, ink.alarm_text)) >= 4.5
    assert min(contrast(colour, paper) for colour in (ink.series, ink.alarm, ink.shade)) >= 3
    assert contrast("#ffffff", ink.tag) >= 4.5
    texts = (THEMES[theme][name] for name in ("textColor", "linkColor", "primaryColor"))
    assert (
        min(
            contrast(text, THEMES[theme][f"{kind}ackgroundColor"])
            for text in texts
            for kind in ("b", "secondaryB")
        )
        >= 4.5
    )
