"""Which span of time a view shows: one of few, typed in plant time, or drawn across a chart."""

from __future__ import annotations

from datetime import datetime, timedelta

import pandas as pd
import streamlit as st

from ingest.unit import Unit
from monitor.page import data

SPANS = {
    "24 h": timedelta(hours=24),
    "3 d": timedelta(days=3),
    "7 d": timedelta(days=7),
    "30 d": timedelta(days=30),
    "all": None,
}
USUAL = "7 d"
BETWEEN = "from\u2013to"
ENDS = ("from", "to")


def choice(label: str, options: list[str], usual: str, key: str) -> str:
    """Offer one choice of few, kept in the address.

    Parameters
    ----------
    label : str
        Above it.
    options : list of str
        What there is.
    usual : str
        What is chosen where the address does not say.
    key : str
        Of the widget and in the address.

    Returns
    -------
    str
        The one chosen.
    """
    held = st.session_state.get(key)
    if held in options:
        # Claimed anew: else the widget of another view takes it away where the address leaves it out.
        st.session_state[key] = held
    elif st.query_params.get(key) not in options:
        # Set here and not as the default: the brush sets it too, and an address leaves out defaults.
        st.session_state[key] = usual
    return str(st.segmented_control(label, options, required=True, key=key, bind="query-params"))


def pick() -> None:
    """Offer the spans."""
    choice("Span", [*SPANS, BETWEEN], USUAL, "span")


def chosen(unit: Unit, known: data.Span) -> tuple[pd.Timestamp, pd.Timestamp]:
    """Give the span to show; its ends are typed in plant time, or drawn with the brush.

    Parameters
    ----------
    unit : Unit
        Gives the zone.
    known : Span
        Time that the store knows.

    Returns
    -------
    tuple of Timestamp
        First and last instant, UTC; the second may lie before the first when it was typed so.
    """
    name = st.session_state["span"]
    if name != BETWEEN:
        for key in ENDS:
            st.query_params.pop(key, None)
        length = SPANS[name]
        return (known.first if length is None else known.last - length), known.last
    low, high = (edge.tz_convert(unit.time_zone).tz_localize(None) for edge in (known.first, known.last))
    usual = {"from": max(low, high - pd.Timedelta(days=1)), "to": high}
    with st.container(horizontal=True, vertical_alignment="bottom", gap="medium"):
        first, last = (_moment(key, usual[key], (low, high)) for key in ENDS)
        st.button(f"Show {USUAL} again", on_click=_widen)
    return _plant(first, unit), _plant(last, unit)


def _moment(key: str, usual: datetime, kept: tuple[datetime, datetime]) -> datetime:
    """One end of the span, typed: the keyboard's way to what the brush does; the address keeps it."""
    if key not in st.session_state:
        st.session_state[key] = _addressed(key, usual)
    day = timedelta(days=1)
    typed = st.datetime_input(
        f"{key.capitalize()} (plant time)", value=None, key=key, format="DD.MM.YYYY", step=600, width=260,
        min_value=min(kept[0] - day, st.session_state[key] or usual),
        max_value=max(kept[1] + day, st.session_state[key] or usual),
    )  # fmt: skip
    moment = typed or usual
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
    st.session_state["span"] = USUAL


def take_brush(where: str, unit: Unit) -> None:
    """Make the span that was drawn the span that is shown.

    Parameters
    ----------
    where : str
        Key of the chart.
    unit : Unit
        Gives the zone.
    """
    drawn = st.session_state[where].selection.get("brush", {}).get("time")
    if not drawn or drawn[0] == drawn[1]:
        return
    edges = [pd.Timestamp(at, unit="ms", tz="UTC").round("10min").tz_convert(unit.time_zone) for at in drawn]
    for key, edge in zip(ENDS, edges, strict=True):
        st.session_state[key] = edge.tz_localize(None).to_pydatetime()
    st.session_state["span"] = BETWEEN
    st.session_state["brushed"] = True


def show_brushed() -> None:
    """Run the whole view again when a span was drawn since it ran last."""
    if st.session_state.pop("brushed", False):
        st.rerun(scope="app")
