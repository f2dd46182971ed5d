"""The summary of a month on the screen: the same tables as its files, held against what was issued."""

from __future__ import annotations

from collections.abc import Mapping
from datetime import timedelta
from functools import partial
from html import escape

import streamlit as st

from ingest.unit import Unit
from monitor.axes import Spec
from monitor.charts import Chart
from monitor.page import data, shell, study
from monitor.summary import parcel, pictures, printed
from monitor.summary.span import Span
from monitor.summary.standing import AS_ISSUED, NOT_ISSUED, Standing, standing
from monitor.summary.table import Summary, with_tables
from monitor.summary.workbook import HEADLINE, revision_words

REFRESH = timedelta(minutes=5)  # adding up a month takes a second or so
USUAL = "what a summary names"
NOW = "as the store stands now"
SHAPES = {AS_ISSUED: "\u25cf", NOT_ISSUED: "\u25cb"}
# What stands folded below the rest: name of the table, heading.
FOLDED = {
    "days": "Days: hours and tonnes",
    "balances": "Balance by day",
    "instruments": "Instruments and operating point",
    "alerts": "Alerts",
    "exclusions": "Left out",
    "words": "Events and notes",
    "identity": "What this was made from",
    "definitions": "What the words mean",
}


def view() -> None:
    """Draw the view: choices above, the summary below."""
    unit = shell.unit()
    months = study.months(unit) if data.version() else {}
    if not months:
        shell.nothing_yet()
        return
    with st.container(horizontal=True, vertical_alignment="bottom", gap="medium"):
        month = _select("Month", list(months), "month")
        others = [name for name in months if name != month]
        other = _select("Compared with", [USUAL, *others], "against")
        issued = {revision_words(one): one for one in study.issued(unit, months[month])}
        shown = _select("Shown", [NOW, *reversed(issued)], "revision")
    _body(unit.key, month, other, shown)


def _select(label: str, options: list[str], key: str) -> str:
    """One choice of several, kept in the address; what the address names and is not there is left alone."""
    if st.session_state.get(key) not in options:
        st.session_state.pop(key, None)
    if st.query_params.get(key) not in (None, *options):
        st.query_params.pop(key)
    return str(st.selectbox(label, options, key=key, bind="query-params", width=230))


@st.fragment(run_every=REFRESH)
def _body(key: str, month: str, other: str, shown: str) -> None:
    unit = data.units()[key]
    months = study.months(unit)
    asked = months[month]
    issued = study.issued(unit, asked)
    with st.spinner("Adding up the month"):
        held = standing(study.summary(unit, asked), issued)
    summary = next((one for one in issued if revision_words(one) == shown), held.summary)
    _head(summary, held)
    _downloads(summary)
    _first(summary)
    _hours(summary)
    _compared(unit, summary, asked, months.get(other))
    _folded(summary)


def _head(summary: Summary, held: Standing) -> None:
    """Whose summary this is, and how it stands against what was issued."""
    told = summary.tables["identity"].set_index("item")["text"]
    facts = (
        f"<strong>{escape(summary.span_name)}</strong>",
        escape(revision_words(summary)),
        f"prepared by {printed.text(told['prepared by'])}",
        f"record until {printed.text(told['record until'])}",
        printed.text(told["catalyst"]),
    )
    shell.write('<div class="facts">' + "".join(f"<span>{fact}</span>" for fact in facts) + "</div>")
    shell.write(f"<p>{_standing(held, summary.span)}</p>")
    if len(held.changes):
        with st.expander(f"What changed since revision {held.last}"):
            shell.sheet(printed.table(with_tables(held.summary, 0, changes=held.changes), "changes"))
    if "changes" in summary.tables:
        with st.expander(f"What revision {summary.revision} changed"):
            shell.sheet(printed.table(summary, "changes"))


def _standing(held: Standing, span: str) -> str:
    command = f"<code>outlet month {escape(span)}</code>"
    if held.word == NOT_ISSUED:
        return f"{SHAPES[NOT_ISSUED]} Not issued yet; {command} writes its files and keeps it as revision 1."
    if held.word == AS_ISSUED:
        return f"{SHAPES[AS_ISSUED]} The store still says what revision {held.last} says."
    count = len(held.changes)
    return (
        f'<span class="alarm">\u25b2 {count} {"entry" if count == 1 else "entries"} changed</span> since '
        f"revision {held.last} was issued; {command} makes revision {held.last + 1} of it."
    )


def _downloads(summary: Summary) -> None:
    """The files of the summary; each is made when it is asked for."""
    with st.container(horizontal=True, gap="small"):
        for name, form in parcel.FORMS.items():
            st.download_button(
                form.label,
                partial(form.make, summary),
                file_name=parcel.name_of(summary, form),
                mime=form.media,
                key=f"save {name}",
                on_click="ignore",
            )


def _first(summary: Summary) -> None:
    """What is read first: main figures in both modes, and by day."""
    shell.write("<h2>Figures read first</h2>")
    shell.sheet(printed.figures(summary, HEADLINE))
    _pictures(pictures.front(summary, ink=shell.ink()))


def _hours(summary: Summary) -> None:
    left, right = st.columns(2, gap="large")
    with left:
        shell.write("<h2>Hours</h2>")
        shell.sheet(printed.table(summary, "hours"))
        _picture("Hours of each day", pictures.hours_by_day(summary, ink=shell.ink()), "hours")
    with right:
        shell.write("<h2>Tonnes</h2>")
        shell.sheet(printed.table(summary, "tonnes"))
        shell.write("<h2>Catalyst</h2>")
        shell.sheet(printed.table(summary, "catalyst"))


def _compared(unit: Unit, summary: Summary, asked: Span, other: Span | None) -> None:
    """Differences from what a summary names, or from a month of choice; first of what is read first."""
    title, found = "Compared with", summary.tables["comparisons"]
    if other is not None:
        title = f"Compared with {other.name}, as the store stands now"
        with st.spinner("Adding up the other month"):
            found = study.against(unit, asked, other)
    shell.write(f"<h2>{escape(title)}</h2>")
    first = found[found["figure"].isin(HEADLINE)]
    shell.sheet(printed.comparisons(with_tables(summary, summary.revision, comparisons=first)))
    with st.expander(f"{title}: all figures"):
        shell.sheet(printed.comparisons(with_tables(summary, summary.revision, comparisons=found)))
    shell.write("<h2>Against the healthy period</h2>")
    shell.sheet(printed.table(summary, "expectation"))


def _folded(summary: Summary) -> None:
    """The long tables, each under its heading."""
    with st.expander("All figures"):
        shell.sheet(printed.figures(summary, None))
    with st.expander("Figures by day"):
        shell.sheet(printed.by_day(summary))
    for name, heading in FOLDED.items():
        rows = len(summary.tables[name])
        with st.expander(heading if rows else f"{heading}: none"):
            if name == "alerts":
                shell.write(f"<p>{printed.counted(summary)}</p>")
            if name == "balances":
                spec = pictures.closures_by_day(summary, ink=shell.ink())
                _picture("Closures by day as read [%], 95 % interval", spec, "closures")
            shell.sheet(printed.table(summary, name))


def _pictures(specs: Mapping[str, Spec]) -> None:
    """Charts two by two."""
    columns = st.columns(2, gap="large")
    for place, (caption, spec) in enumerate(specs.items()):
        with columns[place % 2]:
            _picture(caption, spec, f"front {place}")


def _picture(caption: str, spec: Spec, key: str) -> None:
    """One chart as wide as its column."""
    shell.write(f'<p class="caption">{escape(caption)}</p>')
    wide = spec | {"width": "container", "height": 130, "autosize": {"type": "fit-x", "contains": "padding"}}
    shell.draw(Chart(wide, {}, f"{caption}; the numbers stand in the tables below."), f"picture {key}")
