"""What was taken in: when, how each export stands, and what became of every reading of it."""

from __future__ import annotations

import math
from collections.abc import Mapping
from datetime import datetime, timedelta
from html import escape

import pandas as pd
import streamlit as st

from ingest.account import Account
from ingest.records import Export
from ingest.unit import Unit
from monitor import deliveries, incoming, wording
from monitor.page import data, shell, spans

HOUR, DAY = timedelta(hours=1), timedelta(days=1)
STEPS = {
    "48 h by hour": (48 * HOUR, HOUR),
    "2 weeks by 6 h": (14 * DAY, 6 * HOUR),
    "10 weeks by day": (70 * DAY, DAY),
}
USUAL_STEPS = "2 weeks by 6 h"
ALL = "all"
SHEET = 25  # exports shown at once
MOST_TAGS = 12  # named where more were not asked for


def view() -> None:
    """Draw the view: choices above, what refreshes by itself below."""
    unit = shell.unit()
    if not data.version():
        shell.nothing_yet()
        return
    with st.container(horizontal=True, vertical_alignment="bottom", gap="large"):
        steps = spans.choice("Deliveries", [*STEPS], USUAL_STEPS, "deliveries")
        status = spans.choice("Exports", [ALL, *deliveries.SHAPES], ALL, "exports")
        name = st.text_input("Name holds", key="named", bind="query-params", width=300)
    _body(unit.key, steps, status, name or "")


@st.fragment(run_every=shell.REFRESH)
def _body(key: str, steps: str, status: str, name: str) -> None:
    unit = data.units()[key]
    frame = data.exports()
    _deliveries(unit, frame, steps)
    found = deliveries.matching(frame, name)
    if status != ALL:
        found = found[found["status"] == status]
    _count(frame, found)
    if found.empty:
        shell.empty("No export of that kind.", "Choose others above, or clear the name.")
        return
    sheet = _sheet(len(found))
    shown = found.iloc[(sheet - 1) * SHEET : sheet * SHEET]
    entries = data.entries(tuple(shown["number"].tolist()))
    names = dict(zip(frame["number"].tolist(), frame["name"].tolist(), strict=True))
    lines = "".join(_export(unit, one, names) for one in entries)
    shell.write(f"<div class='exports'>{lines}</div>")


def _deliveries(unit: Unit, frame: pd.DataFrame, steps: str) -> None:
    """What arrived when, and the longest time without anything."""
    now = shell.clock()
    length, step = STEPS[steps]
    bins = incoming.by_time(frame, now - length, now, unit.time_zone, step=step)
    gap = incoming.longest_gap(frame, now - length, now)
    words = "Nothing has been delivered yet."
    if gap:
        begin, end = (wording.local_time(at, unit.time_zone, now=now) for at in gap)
        end = "now" if gap[1] >= now else end
        words = (
            f"Longest time without a delivery: {wording.duration(gap[1] - gap[0])}, from {begin} to {end}."
        )
    shell.write(
        "<h2>What arrived when</h2><p class='quiet'>Readings by the time at which their export was taken in, "
        f"on a logarithmic scale. {escape(words)}</p>"
    )
    shell.draw(incoming.chart(bins, unit.time_zone, shell.ink()), f"deliveries {steps}")


def _count(frame: pd.DataFrame, found: pd.DataFrame) -> None:
    """How many exports there are, of each status, and how many of them are listed."""
    counts = frame["status"].value_counts()
    of_each = ", ".join(
        f"{shape} {wording.number(int(counts.get(status, 0)), 0)} {status}"
        for status, shape in deliveries.SHAPES.items()
    )
    listed = "" if len(found) == len(frame) else f" Listed: {wording.number(len(found), 0)}."
    total = f"{wording.number(len(frame), 0)} export{'' if len(frame) == 1 else 's'}: {of_each}."
    shell.write(
        f"<h2>Exports, newest first</h2><p class='quiet'>{total}{listed} Each opens to what became of every "
        "reading of it.</p>"
    )


def _sheet(count: int) -> int:
    """Which sheet of the list is shown."""
    sheets = math.ceil(count / SHEET)
    if sheets == 1:
        return 1
    if st.session_state.get("exports_sheet", 1) > sheets:
        st.session_state["exports_sheet"] = sheets
    label = f"Sheet, 1 to {sheets}, of {SHEET} exports each"
    return int(st.number_input(label, min_value=1, max_value=sheets, step=1, key="exports_sheet", width=300))


def _export(unit: Unit, one: Export, names: Mapping[int, str]) -> str:
    """One export as a line that opens to its account."""
    status, account = deliveries.status_of(one), deliveries.account_of(one)
    css = {deliveries.ASIDE: "alarm", deliveries.IN_PART: "some"}.get(status, "")
    when = wording.local_time(datetime.fromisoformat(one.taken_at), unit.time_zone, now=shell.clock())
    sums = _sum(account) if account else escape(one.error.splitlines()[0])
    return (
        f"<details><summary><span class='{css}'>{deliveries.SHAPES[status]} {status}</span>"
        f"<span class='name'>{escape(one.name)}</span><span class='quiet'>{when}</span>"
        f"<span class='sum'>{sums}</span></summary><div>{_inside(one, account, names)}</div></details>"
    )


def _sum(account: Account) -> str:
    """The readings as the sum of what became of them."""
    places = " + ".join(f"{_number(count)} {words}" for count, words in deliveries.sum_of(account))
    return f"{_number(account.readings)} readings = {places}"


def _number(count: int) -> str:
    return wording.number(count, 0)


def _inside(one: Export, account: Account | None, names: Mapping[int, str]) -> str:
    """What an export opens to."""
    size = f"{_number(one.size)} bytes"
    facts = f"<p class='quiet'>Export {one.number}, {size}, taken in by pass {one.made_by}.</p>"
    if account is None:
        what, *remedy = one.error.splitlines()
        return f"{facts}<p>{escape(what)}</p><p class='quiet'>{escape(' '.join(remedy).strip())}</p>"
    parts = (
        _ledger(account) + _winners(one, account, names),
        _faults(account),
        _beside(account),
        _unasked(account),
        _read(one),
    )
    return (
        facts + "<div class='account'>" + "".join(f"<div>{part}</div>" for part in parts if part) + "</div>"
    )


def _ledger(account: Account) -> str:
    """The places of the readings one below the other, and their sum."""
    rows = "".join(
        f"<tr><th scope='row'>{escape(words)}</th><td>{_number(count)}</td></tr>"
        for count, words in deliveries.sum_of(account)
    )
    total = f"<tr class='total'><th scope='row'>readings</th><td>{_number(account.readings)}</td></tr>"
    quality = f"{_number(account.bad)} of bad quality, {_number(account.unknown)} without a stated quality"
    return (
        f"<h3>What became of {_number(account.rows)} rows</h3><table class='sums'>{rows}{total}</table>"
        f"<p class='quiet'>As read: {quality}.</p>"
    )


def _winners(one: Export, account: Account, names: Mapping[int, str]) -> str:
    """Who replaced readings of the export."""
    told = deliveries.winners(account, one.number, names)
    return "".join(f"<p>{escape(line)}.</p>" for line in told)


def _faults(account: Account) -> str:
    """Each reason for which readings were rejected, with what to do and the first rows of it."""
    told = "".join(
        f"<p>{escape(what)}.</p><p class='quiet'>{escape(remedy)}</p>"
        + "".join(f"<p class='row'>{escape(row)}</p>" for row in rows)
        for what, remedy, rows in deliveries.faults(account)
    )
    return f"<h3>Rejected</h3>{told}" if told else ""


def _beside(account: Account) -> str:
    """Lines that hold no readings, above, between and below the rows."""
    kinds, *lines = (*account.beside(), "")
    told = "".join(f"<p class='row'>{escape(line.strip())}</p>" for line in lines if line)
    return f"<h3>Beside the rows</h3><p>{escape(kinds)}</p>{told}" if kinds else ""


def _unasked(account: Account) -> str:
    """Tags that no unit file names."""
    if not account.unasked_tags:
        return ""
    tags = "".join(
        f"<tr><th scope='row'>{escape(tag) or 'a column without name'}</th><td>{_number(count)}</td></tr>"
        for tag, count in account.unasked_tags[:MOST_TAGS]
    )
    left = len(account.unasked_tags) - MOST_TAGS
    more = f"<p class='quiet'>and {_number(left)} tags more</p>" if left > 0 else ""
    return f"<h3>Not asked for: no unit file names these tags</h3><table class='sums'>{tags}</table>{more}"


def _read(one: Export) -> str:
    """How the export was read, as it was told when it was."""
    told = "".join(f"<p class='quiet'>{escape(line)}</p>" for line in one.account.get("dialect", ()))
    return f"<h3>How it was read</h3>{told}" if told else ""
