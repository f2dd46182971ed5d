"""One to four figures over hours to years, with limits, band, episodes and the time that does not count."""

from __future__ import annotations

from datetime import datetime, timedelta

import pandas as pd
import streamlit as st

from ingest.unit import Unit, Watch
from monitor import board, charts, wording
from monitor.board import MODES, SHIFT
from monitor.figures import Figure
from monitor.page import data, details, shell

SPANS = {
    "24 h": timedelta(hours=24),
    "3 d": timedelta(days=3),
    "7 d": timedelta(days=7),
    "30 d": timedelta(days=30),
    "all": None,
}
BETWEEN = "from\u2013to"
ENDS = ("from", "to")
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
    first, last = _when(unit, known)
    if not names:
        shell.empty("No figure is chosen.", "Choose one to four figures above.")
    elif first >= last:
        shell.empty("The span ends before it begins.", "Choose an end that is later than the beginning.")
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
        window = _choice("Window", list(windows), usual_window, "window")
        mode = _choice("Time that counts", list(MODES), MODES[0], "mode")
        _choice("Span", [*SPANS, BETWEEN], "7 d", "span")
    return list(names), windows[window], mode


def _choice(label: str, options: list[str], usual: str, key: str) -> str:
    """One choice of few, kept in the address."""
    if key not in st.session_state and key not in st.query_params:
        # Set here and not as the default: the brush sets it too, and an address leaves out defaults.
        st.session_state[key] = usual
    return str(st.segmented_control(label, options, required=True, key=key, bind="query-params"))


def _when(unit: Unit, known: data.Span) -> tuple[pd.Timestamp, pd.Timestamp]:
    """The span shown; from and to are typed in plant time, or drawn with the brush."""
    chosen = st.session_state["span"]
    if chosen != BETWEEN:
        for key in ENDS:
            st.query_params.pop(key, None)
        length = SPANS[chosen]
        return (known.first if length is None else known.last - length), known.last
    low, high = (edge.tz_convert(unit.time_zone).tz_localize(None) for edge in (known.first, known.last))
    usual = {"from": max(low, high - pd.Timedelta(days=1)), "to": high}
    with st.container(horizontal=True, vertical_alignment="bottom", gap="medium"):
        first, last = (_moment(key, usual[key], (low, high)) for key in ENDS)
        st.button("Show 7 d again", on_click=_widen)
    return _plant(first, unit), _plant(last, unit)


def _moment(key: str, usual: datetime, kept: tuple[datetime, datetime]) -> datetime:
    """One end of the span, typed: the keyboard's way to what the brush does; the address keeps it."""
    if key not in st.session_state:
        st.session_state[key] = _addressed(key, usual)
    day = timedelta(days=1)
    chosen = st.datetime_input(
        f"{key.capitalize()} (plant time)", value=None, key=key, format="DD.MM.YYYY", step=600, width=260,
        min_value=min(kept[0] - day, st.session_state[key] or usual),
        max_value=max(kept[1] + day, st.session_state[key] or usual),
    )  # fmt: skip
    moment = chosen or usual
    st.query_params[key] = moment.isoformat(timespec="minutes")
    return moment


def _addressed(key: str, usual: datetime) -> datetime:
    """What the address says, where it says a time."""
    try:
        return datetime.fromisoformat(st.query_params.get(key, "")).replace(tzinfo=None)
    except ValueError:
        return usual


def _plant(moment: datetime, unit: Unit) -> pd.Timestamp:
    """An instant from what was typed; in the doubled hour of autumn the first of the two."""
    return (
        pd.Timestamp(moment)
        .tz_localize(unit.time_zone, ambiguous=True, nonexistent="shift_forward")
        .tz_convert("UTC")
    )


def _widen() -> None:
    st.session_state["span"] = "7 d"


@st.fragment(run_every=shell.REFRESH)
def _charts(
    key: str, names: list[str], figure_of: tuple[timedelta, str], first: pd.Timestamp, last: pd.Timestamp
) -> None:
    """One chart below the other on one span."""
    unit = data.units()[key]
    figures = data.figures(unit)
    if st.session_state.pop("brushed", False):
        st.rerun(scope="app")
    shell.write(
        "<p class='quiet'>Line: mean; dark band: least to greatest; pale band: 95 %. Dashed: limits. Grey: "
        "time that does not count. Bar at the top: episode. Draw across a chart to look closer, or choose "
        f"{BETWEEN} above.</p>"
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
            charts.trend(line, panel), where, selection_mode="brush", on_select=lambda: _brushed(where, unit)
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


def _brushed(where: str, unit: Unit) -> None:
    """Make the span that was drawn the span that is shown."""
    drawn = st.session_state[where].selection.get("brush", {}).get("time")
    if not drawn or drawn[0] == drawn[1]:
        return
    edges = [pd.Timestamp(at, unit="ms", tz="UTC").round("10min").tz_convert(unit.time_zone) for at in drawn]
    for key, edge in zip(ENDS, edges, strict=True):
        st.session_state[key] = edge.tz_localize(None).to_pydatetime()
    st.session_state["span"] = BETWEEN
    st.session_state["brushed"] = True
