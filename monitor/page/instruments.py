"""How the instruments served: which to look at first, strips of their condition, checks, calibrations."""

from __future__ import annotations

import math
from collections.abc import Hashable, Iterable, Mapping, Sequence
from datetime import timedelta
from html import escape
from typing import Any

import pandas as pd
import streamlit as st

from ingest.conditions import ANSWERS
from ingest.lag import DIFFERS
from ingest.screen import Finding
from ingest.unit import Unit
from monitor import board, witnesses, wording
from monitor.attendance import CALIBRATED, KIND_OF, SHAPES
from monitor.delays import Analyzer
from monitor.firstchecks import WORDS, Concern, Evidence, concerns
from monitor.page import data, shell, spans, study
from monitor.strips import WORDS as STRIP_WORDS
from monitor.strips import strips

Shown = tuple[pd.Timestamp, pd.Timestamp]
REFRESH = timedelta(minutes=1)
LONGEST = timedelta(days=366)
CHECKED = timedelta(days=7)  # of readings: minute by minute, so no longer
LAG_DAYS = 7
ANSWER_SHAPES = dict(zip(ANSWERS, ("\u25cf", "\u25cb", "\u25d0", "\u25b2"), strict=True))


def view() -> None:
    """Draw the view: the choice of span above, what refreshes by itself below."""
    unit = shell.unit()
    known = data.span(unit) if data.version() else None
    if known is None:
        shell.nothing_yet()
        return
    spans.pick()
    first, last = spans.chosen(unit, known)
    # Only time that the record holds: an instrument is not missing where nothing was recorded yet.
    first, last = max(first, known.first), min(last, known.last)
    if first >= last:
        shell.ends_before_it_begins()
        return
    if last - first > LONGEST:
        first = last - LONGEST
        shell.write(f"<p class='quiet'>Of this span the last {LONGEST.days} d are shown.</p>")
    _body(unit.key, (first, last))


@st.fragment(run_every=REFRESH)
def _body(key: str, span: Shown) -> None:
    unit = data.units()[key]
    known = data.span(unit)
    if known is None:
        return
    served, adjusted = study.service(unit, *span), data.adjusted(unit, *span)
    lags = study.lags(unit, LAG_DAYS).analyzers
    _first(unit, _evidence(unit, served, adjusted, lags, span))
    _strips(unit, served, span)
    left, right = st.columns([3, 2], gap="large")
    with left:
        shell.write("<h2>How each served</h2>")
        shell.sheet(_table(unit, served, adjusted))
    with right:
        shell.write("<h2>Calibrations</h2>")
        shell.sheet(_calibrations(unit, served.calibrations))
        shell.write(f"<h2>Dead time of analyzers, last {LAG_DAYS} d</h2>")
        shell.sheet(_lags(lags))
        _voters(served.outvoted)
        _parallel(study.parallel(unit))
    _checks(unit, (max(span[0], span[1] - CHECKED), span[1]))


def _evidence(
    unit: Unit, served: study.Service, adjusted: pd.DataFrame, lags: Sequence[Analyzer], span: Shown
) -> Evidence:
    late = {
        one.name: f"declared {_minutes(one.declared_min)}, the data say "
        f"{_minutes(one.stretches[-1].estimate_min)} at last"
        for one in lags
        if one.is_contradicted
    }
    return Evidence(
        attendance=served.table,
        outvoted=served.outvoted,
        adjusted=adjusted,
        alerts=[alert for alert, _ in data.alerts(unit, shell.clock())],
        late=late,
        parallel=study.parallel(unit),
        end=span[1].to_pydatetime(),
    )


def _first(unit: Unit, found: Evidence) -> None:
    """Which to look at first, in order, with the reason."""
    shell.write("<h2>Which to look at first</h2>")
    told = concerns(unit, found)
    if not told:
        shell.write("<p>\u25cf Nothing speaks against any instrument in this span.</p>")
        return
    shell.write(f"<ol class='first'>{''.join(_concern(one) for one in told)}</ol>")


def _concern(one: Concern) -> str:
    return (
        f"<li><p><strong>{escape(one.name)}</strong> &ensp;<span class='alarm'>\u25b2 {WORDS[one.kind]}"
        f"</span>: {escape(one.reason)}.</p><p class='quiet'>{escape(one.remedy)}</p></li>"
    )


def _strips(unit: Unit, served: study.Service, span: Shown) -> None:
    """The condition of every instrument over time."""
    words = "; ".join(f"{SHAPES[kind]} {text}" for kind, text in STRIP_WORDS.items())
    step = ""
    if served.step > unit.cell:
        step = f" Each step is the worst of {wording.duration(served.step)}."
    shell.write(
        f"<h2>Condition over time</h2><p class='quiet'>{escape(words)}. Grey: the unit was down.{step}</p>"
    )
    shaded = board.shaded(data.operating(unit, *span), steady=False, zone=unit.time_zone)
    shell.draw(strips(served.runs, shaded, span=span, zone=unit.time_zone, ink=shell.ink()), "strips")


def _table(unit: Unit, served: study.Service, adjusted: pd.DataFrame) -> str:
    """Availability and adjustment of each instrument in numbers."""
    heads = ("instrument", "kind", "at the end", "took part", "good", "doubted", "mostly kept out by")
    numbers = ("adjusted", "5 % to 95 %", "expected within", "what the balance says")
    kinds = {one.name: one.kind for one in unit.instruments}
    told = adjusted.to_dict("index")
    rows = [
        [
            _cell(str(name)),
            _cell(kinds[str(name)]),
            _cell(f"{SHAPES[KIND_OF[row['now']]]} {row['now']}"),
            *(_number(_percent(row[field])) for field in ("available", "good", "doubted")),
            _cell(row["trouble"] or "\u2013"),
            *_adjusted(told.get(name)),
        ]
        for name, row in served.table.iterrows()
    ]
    return _html((*heads, *numbers), rows)


def _adjusted(row: Mapping[Hashable, Any] | None) -> list[str]:
    """What the balance says about one instrument, in its standard uncertainties."""
    if row is None:
        return [*[_number("\u2013")] * 3, _cell("no part of the balance")]
    if math.isnan(row["mean"]):
        return [*[_number("\u2013")] * 3, _cell(witnesses.WORDS[row["word"]])]
    mean, low, high, within = (wording.number(float(row[f]), 2) for f in ("mean", "low", "high", "expected"))
    return [
        _number(mean),
        _number(f"{low} to {high}"),
        _number(f"±{within}"),
        _cell(witnesses.WORDS[row["word"]]),
    ]


def _calibrations(unit: Unit, found: pd.DataFrame) -> str:
    rows = [
        [
            _cell(str(name)),
            _number(f"{row['windows']}"),
            _number(wording.number(float(row["hours"]), 1)),
            _cell(_from_to(unit, row["start"], row["end"]) if row["windows"] else "none in this span"),
        ]
        for name, row in found.iterrows()
    ]
    return _html(("analyzer", "windows", "hours", "last one"), rows) if rows else _none("no analyzer")


def _from_to(unit: Unit, first: pd.Timestamp, last: pd.Timestamp) -> str:
    begun = wording.local_time(first.to_pydatetime(), unit.time_zone, now=last.to_pydatetime())
    return f"{begun}, {wording.duration((last - first).to_pytimedelta())}"


def _lags(found: Sequence[Analyzer]) -> str:
    """Declared dead time against what the plant's own movement tells."""
    rows = []
    for one in found:
        told = [_number("\u2013"), _cell("\u25cb could not be told")]
        if one.stretches:
            last = one.stretches[-1]
            shape = ANSWER_SHAPES["bad" if last.answer == DIFFERS else "good"]
            told = [
                _number(f"{_minutes(last.estimate_min)} ± {wording.number(last.half_width_min, 1)}"),
                _cell(f"{shape} {last.answer}"),
            ]
        rows.append([_cell(one.name), _number(_minutes(one.declared_min)), *told])
    return _html(("analyzer", "declared", "by the data", "answer"), rows) if rows else _none("no analyzer")


def _minutes(value: float) -> str:
    return f"{wording.number(value, 0 if value == round(value) else 1)} min"


def _voters(share: pd.Series) -> None:
    """Signals that vote on the operating condition, and how often each was outvoted."""
    if share.empty:
        return
    told = ", ".join(f"{escape(str(name))} {_percent(part)}" for name, part in share.items())
    shell.write(
        f"<h2>Outvoted on down and running</h2><p>{told}</p>"
        "<p class='quiet'>Share of the time in which a signal contradicted what most of them said.</p>"
    )


def _parallel(found: Iterable[Sequence[str]]) -> None:
    """Sets that the balance cannot tell apart."""
    sets = "".join(f"<p>{escape(', '.join(one))}</p>" for one in found) or "<p>none</p>"
    shell.write(
        f"<h2>Cannot be told apart</h2>{sets}<p class='quiet'>An error of one of a set leaves the same trace "
        "in the balance as one of the others: look at all of them.</p>"
    )


def _checks(unit: Unit, span: Shown) -> None:
    """What each check says of each instrument, and of how many readings."""
    found = study.findings(unit, *span)
    begun = wording.local_time(span[0].to_pydatetime(), unit.time_zone, now=span[1].to_pydatetime())
    legend = ", ".join(f"{shape} {answer}" for answer, shape in ANSWER_SHAPES.items())
    shell.write(
        f"<h2>Answers of the checks on readings</h2><p class='quiet'>{legend}; readings since {begun}. "
        "Numbers count readings; what one check refused, those after it do not look at.</p>"
    )
    checks = list(dict.fromkeys(one.check for one in found))
    by_name: dict[str, dict[str, Finding]] = {}
    for one in found:
        by_name.setdefault(one.instrument, {})[one.check] = one
    rows = [[_cell(name), *(_answer(told[check]) for check in checks)] for name, told in by_name.items()]
    shell.sheet(_html(("instrument", *checks), rows))
    with st.expander("Why checks are not made"):
        shell.sheet(_reasons(found))


def _answer(one: Finding) -> str:
    """What one check says: how many readings it refused or doubts, else good; what it did not look at."""
    good, unseen, doubted, refused = one.counts
    if one.reason or not good + doubted + refused:
        return _cell(f"{ANSWER_SHAPES['not checked']} not checked")
    if one.check == "calibration" and refused:
        return _cell(f"{SHAPES[CALIBRATED]} calibrating {wording.number(refused, 0)}")
    told = [(refused, "bad"), (doubted, "suspect")]
    parts = [f"{ANSWER_SHAPES[word]} {word} {wording.number(count, 0)}" for count, word in told if count]
    rest = f", {wording.number(unseen, 0)} not checked" if unseen else ""
    if not parts:
        return _cell(f"{ANSWER_SHAPES['good']} good{rest}")
    return f"<td><span class='alarm'>{', '.join(parts)}</span>{rest}</td>"


def _reasons(found: Iterable[Finding]) -> str:
    """Each reason once, with the check and the instruments that it holds for."""
    alike: dict[tuple[str, str], list[str]] = {}
    for one in found:
        if one.reason:
            alike.setdefault((one.check, one.reason), []).append(one.instrument)
    rows = [
        [_cell(check), _long(reason), _long(", ".join(names))] for (check, reason), names in alike.items()
    ]
    return _html(("check", "reason", "instruments"), rows)


def _percent(share: float) -> str:
    return "\u2013" if pd.isna(share) else f"{wording.number(100 * float(share), 1)}\u202f%"


def _cell(text: str) -> str:
    return f"<td>{escape(text)}</td>"


def _long(text: str) -> str:
    return f"<td class='long'>{escape(text)}</td>"


def _number(text: str) -> str:
    return f"<td class='n'>{escape(text)}</td>"


def _none(what: str) -> str:
    return f"<p class='quiet'>The unit file has {what} with a tag.</p>"


def _html(heads: Sequence[str], rows: Iterable[Sequence[str]]) -> str:
    """A table; headings stand on the side on which their column is read."""
    body = list(rows)
    sides = ["n" if "class='n'" in cell else "" for cell in body[0]] if body else [""] * len(heads)
    head = "".join(
        f"<th scope='col' class='{side}'>{escape(text)}</th>" for text, side in zip(heads, sides, strict=True)
    )
    lines = "".join(f"<tr>{''.join(row)}</tr>" for row in body)
    return f"<table><thead><tr>{head}</tr></thead><tbody>{lines}</tbody></table>"
