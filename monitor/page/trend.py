"""One to four figures over hours to years, with limits, band, episodes and the time that does not count."""

from __future__ import annotations

from datetime import timedelta

import pandas as pd
import streamlit as st

from ingest.unit import Unit, Watch
from monitor import board, charts, wording
from monitor.board import MODES, SHIFT
from monitor.figures import Figure
from monitor.page import data, details, shell, spans

MOST = 4
LIKELY = ("yield on feed", "selectivity on converted")
TALL = 240


def view() -> None:
    """Draw the second view: choices above, charts that refresh by themselves below."""
    unit = shell.unit()
    known = data.span(unit) if data.version() else None
    if known is None:
        shell.nothing_yet()
        return
    names, window, mode = _what(unit)
    first, last = spans.chosen(unit, known)
    if not names:
        shell.empty("No figure is chosen.", "Choose one to four figures above.")
    elif first >= last:
        shell.ends_before_it_begins()
    else:
        _charts(unit.key, names, (window, mode), first, last)


def _what(unit: Unit) -> tuple[list[str], timedelta, str]:
    """Which figures, over which window, in which mode."""
    figures = data.figures(unit)
    usual = [name for name in LIKELY if name in figures]
    names = st.multiselect(
        "Figures, one to four",
        list(figures),
        default=usual,
        max_selections=MOST,
        format_func=lambda name: figures[name].label,
        key="figures",
        bind="query-params",
    )
    windows = {wording.window(window): window for window in unit.windows}
    usual_window = wording.window(SHIFT) if SHIFT in unit.windows else next(iter(windows))
    with st.container(horizontal=True, gap="large"):
        window = spans.choice("Window", list(windows), usual_window, "window")
        mode = spans.choice("Time that counts", list(MODES), MODES[0], "mode")
        spans.pick()
    return list(names), windows[window], mode


@st.fragment(run_every=shell.REFRESH)
def _charts(
    key: str, names: list[str], figure_of: tuple[timedelta, str], first: pd.Timestamp, last: pd.Timestamp
) -> None:
    """One chart below the other on one span."""
    unit = data.units()[key]
    figures = data.figures(unit)
    spans.show_brushed()
    shell.write(
        "<p class='quiet'>Line: mean; dark band: least to greatest; pale band: 95 %. Dashed: limits. Grey: "
        "time that does not count. Bar at the top: episode. Draw across a chart to look closer, or choose "
        f"{spans.BETWEEN} above.</p>"
    )
    for index, name in enumerate(names):
        _one(unit, figures[name], figure_of, (first, last), lowest=index == len(names) - 1)


def _one(
    unit: Unit,
    figure: Figure,
    figure_of: tuple[timedelta, str],
    span: tuple[pd.Timestamp, pd.Timestamp],
    *,
    lowest: bool,
) -> None:
    """One figure: its newest value in words, its chart, its table."""
    window, mode = figure_of
    panel = details.panel(unit, figure, _watch(unit, figure.name, window), *span, steady=mode == MODES[1])
    panel = panel.resized(TALL, axis=True, brush=True)
    frame = data.figure(unit, window, (figure.name, mode), *span)
    line = charts.drawn(frame, panel)
    _head(figure, figure_of, frame, unit)
    if line["mean"].notna().any():
        where = f"chart {figure.name} {span[0]} {span[1]} {window} {mode}"
        shell.draw(
            charts.trend(line, panel),
            where,
            selection_mode="brush",
            on_select=lambda: spans.take_brush(where, unit),
        )
    else:
        shell.empty("Nothing to show in this span.", details.why(frame))
    with st.expander("The same as a table"):
        st.dataframe(details.table(line, figure), hide_index=True, height=240, key=f"table {figure.name}")


def _watch(unit: Unit, name: str, window: timedelta) -> Watch | None:
    """Whose limits are drawn: the watch on this figure and window, else the one on another window."""
    exact = [watch for watch in unit.watches if (watch.figure, watch.window) == (name, window)]
    return exact[0] if exact else board.watch_on(unit, name)


def _head(figure: Figure, figure_of: tuple[timedelta, str], frame: pd.DataFrame, unit: Unit) -> None:
    """Name and newest value of a figure."""
    window, mode = figure_of
    there = frame.dropna(subset=["value"])
    newest = "no value in this span"
    if len(there):
        row = there.iloc[-1]
        end = wording.local_time(there.index[-1].to_pydatetime(), unit.time_zone)
        newest = f"{wording.amount(float(row['value']), float(row['half_width']), figure.unit)} to {end}"
    details.heading(figure, f"{wording.window(window)}, {mode}: {newest}")
