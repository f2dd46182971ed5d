"""One alert, opened: its figure, what to check first, the acts and its journal, what the verdict rests on."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable, Iterator
from datetime import datetime, timedelta
from html import escape
from pathlib import Path

import streamlit as st

from ingest.journal import Line
from ingest.unit import Unit, Watch
from monitor import charts, desk, tellalerts, tellverdict, wording
from monitor.alerts import (
    CAUSES,
    CLOSE,
    NORMAL,
    NOTE,
    OUT_OF_SERVICE,
    SHELVE,
    SHELVED,
    TAKE,
    UNSHELVE,
    Alert,
)
from monitor.board import MODES
from monitor.dossier import Dossier
from monitor.page import acts, data, details, shell
from monitor.verdict import NOTHING, Shift, Verdict

BEFORE, AFTER = timedelta(days=3), timedelta(days=1)
LONGEST = timedelta(days=14)  # drawn of an episode; the view Trend shows more
HEIGHT = 170
HOURS = (1.0, 2.0, 4.0, 8.0)


def draw(unit: Unit, one: Dossier, known: data.Span) -> None:
    """Draw all about one alert.

    Parameters
    ----------
    unit : Unit
        Its reactor.
    one : Dossier
        The alert.
    known : Span
        Time that the store knows.
    """
    _chart(unit, one.alert, known)
    # A narrow screen stacks them in this order: what to do comes first.
    do, lost, rests = st.columns([3.4, 4, 4], gap="large")
    with do:
        shell.write(_checks(one))
        _acts(unit, one)
        shell.write(_journal(unit, one))
    with lost:
        shell.write(_numbers(unit, one))
    with rests:
        shell.write(_rests(unit, one))


def _chart(unit: Unit, alert: Alert, known: data.Span) -> None:
    """The figure around the episode with its limit."""
    figure = data.figures(unit).get(alert.figure)
    watch = next((w for w in unit.watches if w.name == alert.watch), None)
    if figure is None:
        return
    window, mode = timedelta(hours=alert.window_h), MODES[1] if watch is None or watch.steady else MODES[0]
    end = min(known.last, (alert.cleared or known.last) + AFTER, alert.first_crossed - BEFORE + LONGEST)
    first = max(known.first, alert.first_crossed - BEFORE)
    panel = details.panel(unit, figure, _limit(watch), first, end, steady=mode == MODES[1], only=alert.watch)
    frame = data.figure(unit, window, (figure.name, mode), first, end)
    panel = panel.resized(HEIGHT, axis=True, brush=False)
    shell.write(f"<p class='quiet'>{escape(figure.label)}, {wording.window(window)}, {mode}</p>")
    shell.draw(charts.trend(charts.drawn(frame, panel), panel), f"alert chart {alert.id}")


def _limit(watch: Watch | None) -> Watch | None:
    return watch if watch and watch.test == "limits" else None


def _at(time_us: int, unit: Unit) -> str:
    return wording.local_time(wording.utc(time_us), unit.time_zone)


def _facts(pairs: Iterable[tuple[str, str]]) -> str:
    rows = "".join(f"<dt>{escape(name)}</dt><dd>{escape(words)}</dd>" for name, words in pairs if words)
    return f"<dl>{rows}</dl>"


def _rests(unit: Unit, one: Dossier) -> str:
    """What was raised, and what the verdict rests on."""
    alert = one.alert
    raised = [
        ("limit first crossed", wording.local_time(alert.first_crossed, unit.time_zone)),
        ("raised", wording.local_time(alert.raised, unit.time_zone)),
        ("cleared", wording.local_time(alert.cleared, unit.time_zone) if alert.cleared else "not yet"),
        ("withdrawn", alert.withdrawn),
    ]
    if one.verdict is None:
        why = "It is made with the first pass after the raise; from eight hours of data on it is final."
        return f"<h3>The alert</h3>{_facts(raised)}<h3>Verdict</h3><p>None yet. {why}</p>"
    return (
        f"<h3>The alert</h3>{_facts(raised)}<h3>What the verdict rests on</h3>"
        f"{_facts(_evidence(unit, one.verdict))}{_likely(one.verdict)}"
    )


def _evidence(unit: Unit, verdict: Verdict) -> Iterator[tuple[str, str]]:
    yield "looked at", f"{_at(verdict.first_us, unit)} to {_at(verdict.last_us, unit)}"
    if verdict.healthy_us:
        whose = "" if verdict.is_healthy_stated else "the time before, since no healthy time is stated: "
        yield "held against", whose + " to ".join(_at(one, unit) for one in verdict.healthy_us)
    if verdict.onset_us is not None:
        yield "moved since", _at(verdict.onset_us, unit)
    if verdict.calibrated:
        yield "calibrated just then", verdict.calibrated
    if verdict.chances:
        yield "balance residuals like these while all is well", tellverdict.chance_words(verdict.balance_p)
        yield "outlet shares like these while all is well", tellverdict.chance_words(verdict.reaction_p)
        yield "what the likeliest cause leaves unexplained", tellverdict.chance_words(verdict.misfit_p)
    yield "outside its healthy range", ", ".join(verdict.outside)
    for held in verdict.conditions:
        yield held.instrument, f"{held.words} for {tellverdict.percent(held.share)} of the window"


def _likely(verdict: Verdict) -> str:
    """Chances of the kinds of cause, and the numbers that moved."""
    chances = "".join(
        f"<tr><th scope='row'>{escape(name)}</th><td>{tellverdict.percent(chance)}</td></tr>"
        for name, chance in verdict.chances
    )
    chances = f"<h3>Chances</h3><table class='sums'>{chances}</table>" if chances else ""
    adjusted = _shifts("Adjustments that changed most [standard uncertainties]", verdict.adjustments)
    return chances + adjusted + _shifts("Run at", verdict.operating)


def _shifts(title: str, shifts: tuple[Shift, ...]) -> str:
    if not shifts:
        return ""
    rows = "".join(
        f"<tr><th scope='row'>{escape(one.name)}</th><td>{tellverdict.value_words(one.before)}</td>"
        f"<td>{tellverdict.value_words(one.now)}</td><td>{escape(one.unit)}</td></tr>"
        for one in shifts
    )
    heads = "<tr><th></th><th scope='col'>healthy</th><th scope='col'>now</th><th></th></tr>"
    return f"<h3>{escape(title)}</h3><table class='sums'>{heads}{rows}</table>"


def _numbers(unit: Unit, one: Dossier) -> str:
    """Suspects, figures without them, and what was lost."""
    verdict = one.verdict
    if verdict is None:
        return ""
    return _suspects(verdict) + _without(verdict) + _loss(unit, verdict)


def _suspects(verdict: Verdict) -> str:
    if not verdict.suspects:
        return "<h3>Suspects</h3><p>None.</p>"
    rows = "".join(
        f"<tr><th scope='row'>{escape(one.name)}</th><td>{escape(one.kind)}</td>"
        f"<td>{tellverdict.percent(one.chance)}</td><td>{escape(tellverdict.size_words(one))}</td></tr>"
        for one in verdict.suspects
    )
    heads = "".join(f"<th scope='col'>{name}</th>" for name in ("", "is", "chance", ""))
    return f"<h3>Suspects</h3><table><tr>{heads}</tr>{rows}</table>"


def _without(verdict: Verdict) -> str:
    """Main figures in the healthy time, as shown, and without each suspect."""
    names = list(dict.fromkeys(one.suspect for one in verdict.figures))
    heads = "".join(f"<th scope='col'>{escape(name)}</th>" for name in ("healthy", "shown"))
    heads += "".join(f"<th scope='col'>without {escape(name)}</th>" for name in names)
    rows = ""
    for shift in verdict.closures:
        held = {one.suspect: one.without for one in verdict.figures if one.name == shift.name}
        values = (shift.before, shift.now, *(held.get(name, math.nan) for name in names))
        cells = "".join(f"<td>{tellverdict.value_words(value)}</td>" for value in values)
        rows += f"<tr><th scope='row'>{escape(shift.name)}, {escape(shift.unit)}</th>{cells}</tr>"
    return f"<h3>Figures</h3><table class='sums'><tr><th></th>{heads}</tr>{rows}</table>" if rows else ""


def _loss(unit: Unit, verdict: Verdict) -> str:
    """What was lost, split by cause and by where it went."""
    loss = verdict.loss
    if loss is None or verdict.word == NOTHING:
        return ""
    parts = (
        ("by conversion", loss.by_conversion),
        ("by selectivity", loss.by_selectivity),
        ("yield", loss.yield_points),
    )
    rows = "".join(
        f"<tr{' class=total' if name == 'yield' else ''}><th scope='row'>{name}</th>"
        f"<td>{tellverdict.signed(points)}</td></tr>"
        for name, points in parts
    )
    went = "".join(
        f"<tr><th scope='row'>{escape(name)}</th><td>{tellverdict.signed(-points)}</td></tr>"
        for name, points in loss.by_product
    )
    made = f"<p>{escape(tellverdict.made_less(loss, unit))}</p>" if math.isfinite(loss.kg_h) else ""
    return (
        f"<h3>What moved, in points of the yield</h3>{made}<div class='account'>"
        f"<table class='sums'>{rows}</table><table class='sums'>{went}</table></div>"
    )


def _checks(one: Dossier) -> str:
    """What to check first, and which reading would settle what is open."""
    verdict = one.verdict
    if verdict is None:
        return ""
    steps = list(dict.fromkeys(suspect.check for suspect in verdict.suspects if suspect.check))
    listed = "".join(f"<li>{escape(step)}</li>" for step in steps)
    settled = "".join(f"<p>Would settle it: {escape(words)}</p>" for words in verdict.settle)
    return f"<h3>Check first</h3><ol class='steps'>{listed}</ol>{settled}" if listed or settled else ""


def _acts(unit: Unit, one: Dossier) -> None:
    """What people can do: each writes one line into the journal, in the name that is typed."""
    condition, alert = one.state.condition, one.alert.id
    seen = acts.seen(one.state.lines)
    shell.write("<h3>What is done</h3>")
    acts.name()
    with st.container(horizontal=True, gap="small"):
        if one.asks:
            st.button(
                "Take", key=f"take {alert} {seen}", type="primary", on_click=_do,
                args=(unit.key, alert, seen, TAKE), help="You look after it.",
            )  # fmt: skip
        if condition == SHELVED:
            st.button(
                "Unshelve", key=f"unshelve {alert} {seen}", on_click=_do,
                args=(unit.key, alert, seen, UNSHELVE),
            )  # fmt: skip
        elif condition not in (NORMAL, OUT_OF_SERVICE):
            _form(unit, alert, seen, SHELVE)
        _form(unit, alert, seen, NOTE)
        _form(unit, alert, seen, CLOSE)
    acts.told(alert)


LABELS = {SHELVE: "Shelve", NOTE: "Note", CLOSE: "Close"}
ASKED = {SHELVE: "Reason", NOTE: "Note", CLOSE: "What was found"}


def _form(unit: Unit, alert: str, seen: int, word: str) -> None:
    """What an act needs besides the name."""
    key = f"{word} {alert} {seen}"
    with st.popover(LABELS[word], key=f"ask {key}"), st.form(key, border=False):
        if word == SHELVE:
            st.selectbox("For how long", HOURS, index=len(HOURS) - 1, key=f"{key} hours", format_func=_hours)
        if word == CLOSE:
            st.selectbox("Cause", CAUSES, key=f"{key} cause")
        st.text_area(ASKED[word], key=f"{key} words", max_chars=2000, height=90)
        st.form_submit_button(LABELS[word], type="primary", on_click=_do, args=(unit.key, alert, seen, word))


def _hours(hours: float) -> str:
    return f"{hours:g} h"


def _do(unit: str, alert: str, seen: int, word: str) -> None:
    """Do what was pressed with what was typed."""
    key = f"{word} {alert} {seen}"
    words = str(st.session_state.get(f"{key} words", ""))
    hours, cause = st.session_state.get(f"{key} hours", HOURS[-1]), st.session_state.get(f"{key} cause", "")
    ways: dict[str, Callable[[Path, str], Line]] = {
        TAKE: lambda folder, who: desk.take(folder, alert, who),
        UNSHELVE: lambda folder, who: desk.unshelve(folder, alert, who),
        NOTE: lambda folder, who: desk.add_note(folder, alert, who, words),
        SHELVE: lambda folder, who: desk.shelve(
            folder, alert, who, reason=words, length=timedelta(hours=hours)
        ),
        CLOSE: lambda folder, who: desk.close(folder, alert, who, cause=cause, note=words),
    }
    acts.once(ways[word], word, unit=unit, subject=alert, seen=seen)


def _journal(unit: Unit, one: Dossier) -> str:
    """The alert's lines of the journal, and what late data changed, newest first."""
    zone = unit.time_zone
    told = [
        (datetime.fromisoformat(line.written), tellalerts.act_words(line), line.note)
        for line in one.state.lines
    ]
    told += [
        (when, f"revised: {changes}", "")
        for when, changes in tellalerts.revised(data.history(one.alert), zone)
    ]
    rows = "".join(
        f"<p class='row'>{wording.local_time(when, zone, now=shell.clock())}, {escape(what)}"
        f"{f': {escape(note)}' if note else ''}</p>"
        for when, what, note in sorted(told, reverse=True)
    )
    nothing = "<p class='quiet'>Nothing is written about it yet.</p>"
    return f"<h3>Journal</h3>{rows or nothing}"
