"""The note from shift to shift: what the last shift left, what stands now, and a box for this one."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import asdict
from datetime import datetime, timedelta
from html import escape
from pathlib import Path

import streamlit as st

from ingest import journal
from ingest.journal import Line
from ingest.unit import Unit
from monitor import shiftnote, wording
from monitor.board import MODES, SHIFT, Row
from monitor.days import figure_step
from monitor.dossier import Dossier
from monitor.page import acts, data, shell
from monitor.shiftnote import ACT, Shift, Standing

MODE = MODES[1]
NOTHING = "<p class='quiet'>Nothing: no alert, no instrument out, nothing moved.</p>"


def last(unit: Unit) -> None:
    """Draw the note of the last shift that left one; nothing where none did.

    Parameters
    ----------
    unit : Unit
        One reactor.
    """
    this = shiftnote.shift_at(unit.shift_starts, unit.time_zone, shell.clock())
    notes = shiftnote.last_notes(data.lines(unit), this)
    if notes:
        shell.write(f"<h2>Note of shift {_whose(unit, notes)}</h2>{_notes(unit, notes)}")


def draw(unit: Unit, known: data.Span, found: Sequence[Dossier], rows: Sequence[Row]) -> None:
    """Draw what stood when the last note was left, what stands now, and the box for this shift's note.

    Parameters
    ----------
    unit : Unit
        One reactor.
    known : Span
        Time that the store knows.
    found : sequence of Dossier
        Open alerts, worst first.
    rows : sequence of Row
        The key figures.
    """
    now = shell.clock()
    lines = data.lines(unit)
    this = shiftnote.shift_at(unit.shift_starts, unit.time_zone, now)
    standing = _standing(unit, known, found, rows)
    shell.write("<h2>From shift to shift</h2>")
    left, right = st.columns(2, gap="large")
    with left:
        _last(unit, lines, this)
    with right:
        _this(unit, lines, this, standing)


def _standing(unit: Unit, known: data.Span, found: Sequence[Dossier], rows: Sequence[Row]) -> Standing:
    told = [(one.alert, one.state, one.said, one.verdict) for one in found]
    return shiftnote.standing(
        unit,
        told,
        rows,
        shiftnote.moved(rows, _before(unit, known, rows), mode=MODE),
        data.outages(unit, max(known.first, known.last - SHIFT), known.last),
    )


def _before(unit: Unit, known: data.Span, rows: Sequence[Row]) -> dict[str, tuple[float, float]]:
    """The key figures of the eight hours before the last eight."""
    end, found = known.last - SHIFT, {}
    for row in rows:
        frame = data.figure(unit, SHIFT, (row.figure.name, MODE), end - figure_step(unit), end).tail(1)
        if len(frame):
            found[row.figure.name] = (float(frame["value"].iloc[0]), float(frame["half_width"].iloc[0]))
    return found


def _last(unit: Unit, lines: tuple[Line, ...], this: Shift) -> None:
    """What stood when the last shift that left a note did so."""
    notes = shiftnote.last_notes(lines, this)
    if not notes:
        shell.write("<h3>The last note</h3><p class='quiet'>No earlier shift has left a note.</p>")
        return
    stood = _lists(notes[-1].detail["list"]) or NOTHING
    shell.write(f"<h3>When shift {_whose(unit, notes)} left its note</h3>{stood}")


def _whose(unit: Unit, notes: Sequence[Line]) -> str:
    kept = notes[-1].detail
    return _span(unit, datetime.fromisoformat(kept["from"]), datetime.fromisoformat(kept["to"]))


def _this(unit: Unit, lines: tuple[Line, ...], this: Shift, standing: Standing) -> None:
    """What stands now, what this shift has written, and the box for more."""
    notes = shiftnote.notes_of(lines, this)
    listed = _lists(asdict(standing)) or NOTHING
    shell.write(
        f"<h3>This shift, {_span(unit, this.first, this.last)}: what stands now is kept with its note</h3>"
        f"{listed}{_notes(unit, notes)}"
    )
    seen = acts.seen(notes)
    key = f"shift note {this.subject} {seen}"
    acts.name()
    with st.form(key, border=False):
        st.text_area("For the next shift", key=f"{key} words", max_chars=4000, height=100)
        st.form_submit_button(
            "Leave the note", on_click=_leave, args=(unit.key, this, seen, shiftnote.detail(this, standing))
        )
    acts.told(this.subject)


def _leave(unit: str, this: Shift, seen: int, detail: Mapping[str, object]) -> None:
    words = str(st.session_state.get(f"shift note {this.subject} {seen} words", "")).strip()
    if not words:
        acts.refuse(this.subject, "The note is empty: write what the next shift has to know.")
        return

    def write(folder: Path, who: str) -> Line:
        return journal.write(
            folder, who=who, act=ACT, unit=unit, subject=this.subject, note=words, detail=detail
        )

    acts.once(write, ACT, unit=unit, subject=this.subject, seen=seen)


def _notes(unit: Unit, notes: Sequence[Line]) -> str:
    """Notes as they were written, line breaks kept."""
    told = "".join(
        f"<p>{'<br>'.join(escape(one) for one in line.note.splitlines())}</p>"
        f"<p class='quiet'>{escape(line.who)}, "
        f"{wording.local_time(datetime.fromisoformat(line.written), unit.time_zone, now=shell.clock())}</p>"
        for line in notes
    )
    return f"<div class='left'>{told}</div>" if told else ""


def _lists(stood: Mapping[str, Sequence[str]]) -> str:
    """The lists of what stands, under their headings."""
    rows = "".join(
        f"<dt>{heading}</dt><dd>{'<br>'.join(escape(line) for line in lines)}</dd>"
        for heading, lines in shiftnote.listed(stood)
    )
    return f"<dl>{rows}</dl>" if rows else ""


def _span(unit: Unit, first: datetime, last: datetime) -> str:
    """`1 Dec 14:00 to 22:00 CET`."""
    begin = wording.local_time(first, unit.time_zone, now=shell.clock())
    end = wording.local_time(last, unit.time_zone, now=shell.clock())
    same = last - first < timedelta(hours=24) and begin.split()[:2] == end.split()[:2]
    words = end.split()
    return f"{begin.rsplit(' ', 1)[0]} to {' '.join(words[2:]) if same else end}"
