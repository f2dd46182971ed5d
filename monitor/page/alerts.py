"""The alerts of a unit, worst first, those of one cause together; one of them opens to all about it."""

from __future__ import annotations

from datetime import timedelta
from functools import partial
from html import escape

import streamlit as st

from ingest.unit import Unit
from monitor import alerthealth, wording
from monitor.alerthealth import CHATTERING, STALE
from monitor.dossier import Dossier
from monitor.page import data, opened, shell, spans, told, trying

OPEN, ALL = "open", "all of 30 d"
BACK = timedelta(days=30)
CHOSEN = "alert"  # in the session and in the address: the alert that is open
NONE = "none"
OPENS, CLOSE = "\u25b8", "\u25be"


def view() -> None:
    """Draw the view: choice above, what refreshes by itself below."""
    unit = shell.unit()
    if not data.version() or data.span(unit) is None:
        shell.nothing_yet()
        return
    which = spans.choice("Alerts", [OPEN, ALL], OPEN, "alerts")
    _body(unit.key, which)
    trying.draw(unit.key)


@st.fragment(run_every=shell.REFRESH)
def _body(key: str, which: str) -> None:
    unit = data.units()[key]
    known = data.span(unit)
    if known is None:
        return
    found = told.dossiers(unit, known, BACK)
    groups = told.groups(found, known, every=which == ALL, length=BACK)
    chosen = _chosen(key, groups)
    shell.write(f"<p>{escape(_count(groups, known, unit))}</p>")
    for group in groups:
        with st.container(border=True, key=f"case {group[0].alert.id}"):
            for place, one in enumerate(group):
                _one(unit, one, known, chosen=one.alert.id == chosen, head=place == 0)
    _health(found, known)


def _chosen(key: str, groups: tuple[tuple[Dossier, ...], ...]) -> str:
    """Which alert is open: the one the address names, at first the worst; none once it was closed."""
    chosen = str(st.session_state.get(CHOSEN) or st.query_params.get(CHOSEN, ""))
    if chosen != NONE and chosen.rpartition("-")[0] != key:  # none yet, or of another unit
        chosen = groups[0][0].alert.id if groups else NONE
    st.session_state[CHOSEN] = st.query_params[CHOSEN] = chosen
    return chosen


def _choose(alert: str) -> None:
    st.session_state[CHOSEN] = alert


def _count(groups: tuple[tuple[Dossier, ...], ...], known: data.Span, unit: Unit) -> str:
    """How many there are, of how many causes, at which time of the record."""
    end = wording.local_time(known.last.to_pydatetime(), unit.time_zone)
    count = sum(len(group) for group in groups)
    if not count:
        return f"\u25cf No alert is open. The record ends {end}."
    alerts, causes = (
        f"{n} {word}{'' if n == 1 else 's'}" for n, word in ((count, "alert"), (len(groups), "cause"))
    )
    told_ = f"{alerts}, worst first" if count == len(groups) else f"{alerts} of {causes}, worst first"
    return f"{told_}; the record ends {end}."


def _one(unit: Unit, one: Dossier, known: data.Span, *, chosen: bool, head: bool) -> None:
    """One alert in two lines; below them all about it where it is the one that is open."""
    alert = one.alert
    with st.container(horizontal=True, vertical_alignment="center", gap="small"):
        st.button(
            f"{CLOSE if chosen else OPENS} **{alert.id}**",
            type="tertiary",
            key=f"open {alert.id}",
            help="Close it" if chosen else "All about it",
            on_click=partial(_choose, NONE if chosen else alert.id),
        )
        with_it = "" if head else "with it, by the same cause: "
        shell.write(f"<p>{with_it}{told.head(one, unit)}</p>", width="content")
    shell.write(f"<p>{escape(one.said)}</p><p>{told.verdict(one)}</p>")
    if chosen:
        opened.draw(unit, one, known)


def _health(found: tuple[Dossier, ...], known: data.Span) -> None:
    """How well the alerts of the last thirty days of the record served."""
    counts = alerthealth.health([(one.alert, one.state) for one in found], known.last.to_pydatetime())
    share = "none closed" if counts.false_share is None else f"{100 * counts.false_share:.0f} %"
    facts = (
        ("raised", f"{counts.raised}, {counts.per_day:.2f} a day", "suppressed and withdrawn ones left out"),
        (
            "chattering",
            str(counts.chattering),
            f"one of {CHATTERING} or more of a watch in its window and a day",
        ),
        ("fleeting", str(counts.fleeting), "over within the window of its watch"),
        ("stale", str(counts.stale), f"stood for more than {wording.duration(STALE)}"),
        ("shelved", str(counts.shelved), "at least once"),
        ("closed", str(counts.closed), "with the cause that was found"),
        ("closed as false", share, "of the closed ones"),
    )
    rows = "".join(
        f"<tr><th scope='row'>{name}</th><td>{value}</td><td class='quiet'>{words}</td></tr>"
        for name, value, words in facts
    )
    shell.write(
        "<h2>How well the alerts serve</h2><p class='quiet'>Last 30 days of the record.</p>"
        f"<table class='health'>{rows}</table>"
    )
