"""Trying limits on the past: what they would have given, the curve of other limits, the lines to paste."""

from __future__ import annotations

from dataclasses import replace
from datetime import timedelta
from html import escape

import streamlit as st

from ingest.errors import OutletError
from ingest.unit import Unit, Watch
from monitor import telltrials, trialchart, wording
from monitor.page import data, shell
from monitor.trials import Trial

NEW = "a new one"
HOUR = timedelta(hours=1)
PAST = {"30 d": timedelta(days=30), "90 d": timedelta(days=90), "a year": timedelta(days=365), "all": None}
TRIED = "tried"  # in the session: what was asked for last


@st.fragment
def draw(key: str) -> None:
    """Draw the choices and, once asked for, what they would have given.

    Parameters
    ----------
    key : str
        Of the unit.
    """
    unit = data.units()[key]
    shell.write(
        "<h2>Try limits</h2><p class='quiet'>On the past, by the figures that are stored. Nothing is set by "
        "it: the lines below the answer are for the unit file.</p>"
    )
    watches = {watch.name: watch for watch in unit.watches}
    with st.container(horizontal=True, vertical_alignment="bottom", gap="medium"):
        name = st.selectbox("Watch", [*watches, NEW], key=f"try watch {key}", width=330)
        past = st.selectbox("Over the last", list(PAST), index=1, key=f"try past {key}", width=120)
    with st.form(f"try {key} {name}", border=False):
        watch = _asked(unit, watches.get(name))
        if st.form_submit_button("Try"):
            st.session_state[TRIED] = (key, watch, PAST[past])
    asked = st.session_state.get(TRIED)
    if asked and asked[0] == key:
        _answer(unit, asked[1], asked[2])


def _asked(unit: Unit, watch: Watch | None) -> Watch:
    """A watch as it is typed; one that tests for drift is tried as it is."""
    if watch is not None and watch.test != "limits":
        shell.write("<p class='quiet'>It tests for drift and has no limits; it is tried as it stands.</p>")
        return watch
    start = watch or _usual(unit)
    place = start.name or NEW
    with st.container(horizontal=True, vertical_alignment="bottom", gap="medium"):
        figure, window = start.figure, start.window
        if watch is None:
            figures = data.figures(unit)
            figure = st.selectbox("Figure", list(figures), key=f"try figure {place}", width=300)
            windows = {wording.window(one): one for one in unit.windows}
            window = windows[st.selectbox("Window", list(windows), key=f"try window {place}", width=110)]
        low, high = (
            _limit(f"{side} limit", value, f"try {side} {place}")
            for side, value in (("Low", start.low), ("High", start.high))
        )
        deadband = st.number_input(
            "Deadband", value=start.deadband, min_value=0.0, key=f"try band {place}", width=120
        )
        on, off = (
            st.number_input(f"{side}-delay [h]", value=length / HOUR, min_value=0.0, max_value=720.0,
                            key=f"try {side} {place}", width=130)
            for side, length in (("On", start.on_delay), ("Off", start.off_delay))
        )  # fmt: skip
    return replace(
        start, figure=figure, window=window, low=low, high=high, deadband=deadband,
        on_delay=on * HOUR, off_delay=off * HOUR,
    )  # fmt: skip


def _limit(label: str, value: float | None, key: str) -> float | None:
    """One limit; it can be emptied, so what it begins with is set here and not as its default."""
    if key not in st.session_state:
        st.session_state[key] = value
    return st.number_input(label, value=None, key=key, format="%.6g", width=130)


def _usual(unit: Unit) -> Watch:
    """What a new watch begins with."""
    return Watch(
        name="", figure=next(iter(data.figures(unit))), window=unit.windows[0], low=None, high=None,
        priority="medium", deadband=0.0, on_delay=HOUR, off_delay=2 * HOUR, steady=True,
    )  # fmt: skip


def _answer(unit: Unit, watch: Watch, past: timedelta | None) -> None:
    """What the watch would have given, or why it cannot be tried."""
    try:
        trial, points = data.trial(unit, watch, past, shell.clock())
    except OutletError as error:
        shell.empty(error.what, error.remedy)
        return
    left, right = st.columns([5, 6], gap="large")
    with left:
        shell.write(_told(trial, unit))
        st.code("\n".join(telltrials.toml(trial.watch)), language="toml")
    with right:
        if points:
            figure = data.figures(unit)[watch.figure]
            shell.write(
                f"<h3>Other limits on {escape(figure.label)}</h3><p class='quiet'>Down and to the left is "
                "better. Filled: all known events caught. Diamond: the limits tried.</p>"
            )
            shell.draw(trialchart.chart(points, figure.unit, shell.ink()), f"trial {unit.key}")


def _told(trial: Trial, unit: Unit) -> str:
    """The answer in a sentence, then every episode and every known event."""
    shown = trial.tried[-telltrials.MOST_EPISODES :]
    episodes = "".join(f"<p class='row'>{escape(telltrials.episode(one, unit))}</p>" for one in shown)
    catches = "".join(f"<p class='row'>{escape(telltrials.caught(one, unit))}</p>" for one in trial.catches)
    known = f"<h3>What is known to have happened</h3>{catches}" if catches else ""
    return (
        f"<p>{escape(telltrials.headline(trial, unit))}.</p>"
        f"<h3>Episodes it would have given</h3>{episodes or '<p>None.</p>'}{known}"
    )
