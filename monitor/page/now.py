"""How the unit does now: against limits, since when, how fresh, which alerts are open, the shift's note."""

from __future__ import annotations

from datetime import datetime, timedelta
from html import escape

import pandas as pd
import streamlit as st

from ingest.unit import Unit
from monitor import board, charts, wording
from monitor.board import MODES, SHIFT, Row
from monitor.dossier import Dossier
from monitor.figures import Figure
from monitor.page import data, details, shell, shift, told

RECENT = timedelta(hours=48)
STRIP_HEIGHT = 80
ALARMING = ("above", "below")


@st.fragment(run_every=shell.REFRESH)
def view() -> None:
    """Draw the first view; refreshes by itself."""
    unit = shell.unit()
    known = data.span(unit) if data.version() else None
    if known is None:
        shell.nothing_yet()
        return
    found = told.dossiers(unit, known, RECENT)
    groups = told.groups(found, known, every=False, length=RECENT)
    _freshness(unit, known)
    _alerts(unit, known, groups)
    shift.last(unit)
    if _never_ran(unit, known):
        shell.empty(
            "The unit never ran in the time taken in.",
            "Figures begin with the first running cell; if it did run, look at [operating] in the unit file.",
        )
        return
    rows = _rows(unit, known)
    for index, one in enumerate(rows):
        _draw_row(unit, one, known, last=index == len(rows) - 1)
    shift.draw(unit, known, [one for group in groups for one in group], rows)


def _never_ran(unit: Unit, known: data.Span) -> bool:
    return not bool((data.operating(unit, known.first, known.last)["word"] == "running").any())


def _freshness(unit: Unit, known: data.Span) -> None:
    """Operating condition, last cell, last export."""
    clock = shell.clock()
    spans = data.operating(unit, known.last - timedelta(days=30), known.last)
    word, since = spans["word"].iloc[-1], spans["start"].iloc[-1]
    long = (
        "for more than 30 d"
        if since <= known.last - timedelta(days=30)
        else f"since {_at(since, unit, clock)}"
    )
    late = clock - known.last > min(unit.windows)
    cell = wording.age(known.last.to_pydatetime(), now=clock, zone=unit.time_zone)
    cell = (
        f'<span class="alarm">\u25b2 no new data</span>: last cell ended {cell}'
        if late
        else f"last cell ended {cell}"
    )
    taken = data.last_export()
    export = (
        f"last export taken in {wording.age(taken, now=clock, zone=unit.time_zone)}" if taken else "no export"
    )
    facts = [
        f"<strong>{wording.OPERATING_SHAPES[word]} {escape(word)}</strong> {long}",
        cell,
        export,
    ]
    shell.write('<div class="facts">' + "".join(f"<span>{fact}</span>" for fact in facts) + "</div>")


def _at(moment: pd.Timestamp, unit: Unit, clock: datetime) -> str:
    return wording.local_time(moment.to_pydatetime(), unit.time_zone, now=clock)


def _alerts(unit: Unit, known: data.Span, groups: tuple[tuple[Dossier, ...], ...]) -> None:
    """Open alerts in words, worst first, with their verdict; if none, when the last one ended."""
    if not groups:
        cleared = data.episodes(unit)["cleared"]
        ended = cleared.max() if len(cleared) else None
        last = f"; the last one ended {_at(ended, unit, known.last)}" if ended is not None else ""
        shell.write(f"<p>\u25cf No limit of {_count(len(unit.watches), 'watch')} is crossed{last}.</p>")
        return
    lines = [_alert(unit, one, joined=place > 0) for group in groups for place, one in enumerate(group)]
    shell.write(f"<h2>{_count(len(lines), 'open alert')}, worst first</h2><ol>{''.join(lines)}</ol>")


def _alert(unit: Unit, one: Dossier, *, joined: bool) -> str:
    """One open alert in words; one that rests or is suppressed by design stays visible as such."""
    css = "" if one.asks else " class='rest'"
    name = f"<strong>{escape(one.alert.id)}</strong>"
    why = "<span class='quiet'>by the same cause as the one above</span>" if joined else told.verdict(one)
    return f"<li{css}>{told.head(one, unit)} {name}: {escape(one.said)}<br>{why}</li>"


def _count(count: int, noun: str) -> str:
    plural = f"{noun}es" if noun.endswith("ch") else f"{noun}s"
    return f"{count} {noun if count == 1 else plural}"


def _rows(unit: Unit, known: data.Span) -> list[Row]:
    latest = {window: data.latest(unit, window) for window in unit.windows}
    return [
        board.row(unit, figure, latest, _recent(unit, figure, known))
        for figure in board.key_figures(unit, tuple(data.figures(unit).values()))
    ]


def _recent(unit: Unit, figure: Figure, known: data.Span) -> pd.DataFrame:
    """Last two days of the window and mode that the watch on this figure looks at."""
    watch = board.watch_on(unit, figure.name)
    window = watch.window if watch else SHIFT
    return data.figure(unit, window, (figure.name, board.mode_of(watch)), known.last - RECENT, known.last)


def _draw_row(unit: Unit, one: Row, known: data.Span, *, last: bool) -> None:
    """One key figure: standing, value of the shift, other windows, last two days."""
    with st.container(border=True, key=f"row {one.figure.name}"):
        words, number, trend = st.columns([2.3, 3.2, 6.5], vertical_alignment="center", gap="medium")
        with words:
            _standing(unit, one, known)
        with number:
            _numbers(one, unit)
        with trend:
            _strip(unit, one, known, axis=last)


def _standing(unit: Unit, one: Row, known: data.Span) -> None:
    """Name, which opens to how the figure was worked out; how it stands, and since when."""
    held = one.standing
    details.popover(unit, one, known)
    css = "alarm" if held.kind in ALARMING else "quiet" if held.kind in ("free", "missing") else ""
    since = f"since {_at(pd.Timestamp(one.since), unit, known.last)}" if one.since else "for more than 48 h"
    since = since if held.kind != "free" else ""
    shell.write(f"<p class='{css}'>{held.shape} {escape(held.words)}</p><p class='quiet'>{since}</p>")


def _numbers(one: Row, unit: Unit) -> None:
    """The shift's value large, the other windows beside it."""
    mode = board.mode_of(one.watch)
    shift = one.readings.get((SHIFT, mode))
    others = "".join(
        f"<span>{wording.window(window)}</span>"
        f"<span>{details.value(one.readings.get((window, mode)), one.figure.unit)}</span>"
        for window in unit.windows
        if window != SHIFT
    )
    big = details.value(shift, one.figure.unit)
    head, _, tail = big.partition("\u00a0±")
    tail = f"<small>\u00a0±{tail}</small>" if tail else ""
    shell.write(
        f"<div class='numbers'><div><div class='big'>{head}{tail}</div><p class='quiet'>8 h, {mode}</p></div>"
        f"<div class='windows'>{others}</div></div>"
    )


def _strip(unit: Unit, one: Row, known: data.Span, *, axis: bool) -> None:
    """The last two days with limits and episodes."""
    steady = board.mode_of(one.watch) == MODES[1]
    panel = details.panel(unit, one.figure, one.watch, known.last - RECENT, known.last, steady=steady)
    panel = panel.resized(STRIP_HEIGHT, axis=axis, brush=False)
    shell.draw(
        charts.trend(charts.drawn(_recent(unit, one.figure, known), panel), panel), f"strip {one.figure.name}"
    )
