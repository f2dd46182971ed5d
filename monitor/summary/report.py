"""A summary as one HTML file: tables and inline charts, prints on A4, needs no script and no address."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping, Sequence
from html import escape
from typing import Any

import pandas as pd

from monitor.axes import Spec
from monitor.celltext import neutral
from monitor.summary import pictures
from monitor.summary.digits import decimals
from monitor.summary.table import Summary, names, rows
from monitor.summary.workbook import HEADLINE, revision_words
from monitor.windows import MODES
from monitor.wording import CAUTIONS, number

Row = Mapping[str, Any]
DASH = "\u2013"
STYLE = """
@page { size: A4 landscape; margin: 12mm 12mm 14mm; }
:root { color-scheme: light; }
* { box-sizing: border-box; }
body { margin: 0 auto; max-width: 273mm; padding: 6mm; background: #fff; color: #1c2a33;
  font: 9.5pt/1.4 Arial, Helvetica, sans-serif; }
header { display: flex; justify-content: space-between; align-items: end; border-bottom: 2px solid #00607f;
  padding-bottom: 2mm; margin-bottom: 4mm; }
h1 { font-size: 17pt; line-height: 1.15; margin: 0; font-weight: 600; }
h2 { font-size: 12pt; margin: 7mm 0 1.5mm; color: #00607f; font-weight: 600; break-after: avoid; }
p { margin: 0 0 2mm; max-width: 190mm; }
.quiet, .word { color: #4f5d66; }
.span { font-size: 12pt; text-align: right; }
table { border-collapse: collapse; width: 100%; font-size: 8pt; line-height: 1.3; margin-bottom: 3mm; }
thead { display: table-header-group; }
tr { break-inside: avoid; }
th, td { padding: 0.7mm 1.6mm; text-align: left; vertical-align: top; border-bottom: 0.2mm solid #e2e6e4; }
th { font-weight: 600; color: #4f5d66; vertical-align: bottom; border-bottom: 0.4mm solid #7d8a92; }
td.n, th.n { text-align: right; font-variant-numeric: tabular-nums; }
td.n { white-space: nowrap; }
th.group { text-align: center; border-left: 0.4mm solid #fff; background: #eef1f0; }
.two { display: grid; grid-template-columns: 1fr 1fr; gap: 2mm 8mm; align-items: start; }
figure { margin: 0; break-inside: avoid; }
figcaption { font-weight: 600; font-size: 9pt; margin: 2mm 0 1mm; }
svg { width: 100%; height: auto; }
.wide { grid-template-columns: 7fr 5fr; }
.new { break-before: page; }
td.t { white-space: nowrap; }
td.long { overflow-wrap: anywhere; min-width: 60mm; }
tr.stretch td { font-weight: 600; padding-top: 2mm; border-bottom-color: #7d8a92; }
footer { margin-top: 6mm; border-top: 0.3mm solid #7d8a92; padding-top: 2mm; font-size: 7.5pt;
  color: #4f5d66; }
@media print { body { padding: 0; max-width: none; } h2.wide { grid-template-columns: 7fr 5fr; }
.new { margin-top: 0; } }
"""
# Columns of the long tables that a page has room for; the workbook holds all.
SHOWN: Mapping[str, Sequence[str]] = {
    "alerts": (
        "watch",
        "side",
        "limit",
        "priority",
        "raised",
        "cleared",
        "hours",
        "worst",
        "outcome",
        "cause",
        "by",
    ),
    "exclusions": ("start", "end", "hours", "code", "cause", "by", "note"),
    "words": ("when", "kind", "about", "text", "by"),
}
LONG = ("text", "meaning", "note", "was", "is", "row")  # texts that may be broken anywhere
NOTHING = {
    "alerts": "No alert stood in this span.",
    "exclusions": "Nothing was left out: the unit was running all the time that is on record.",
    "words": "Nobody wrote an event or a note.",
    "comparisons": "There is nothing on record to compare with.",
    "expectation": "The unit file names no healthy period that is on record.",
    "changes": "",
}  # fmt: skip


def report(summary: Summary) -> str:
    """Write a summary as a page.

    Parameters
    ----------
    summary : Summary

    Returns
    -------
    str
        HTML, whole in itself.
    """
    title = escape(f"{summary.unit_name}, {summary.span_name}")
    head = f'<meta charset="utf-8"><title>{title}</title><meta name="viewport" content="width=device-width">'
    body = "\n".join(_sections(summary))
    return (
        f'<!doctype html>\n<html lang="en"><head>{head}<style>{STYLE}</style></head>\n'
        f"<body>\n{body}\n</body></html>\n"
    )


def _sections(summary: Summary) -> Iterable[str]:
    """The page from top to bottom."""
    yield _head(summary)
    if "changes" in summary.tables:
        yield f"<h2>What revision {summary.revision} changes</h2>"
        yield _table(summary, "changes")
    yield "<h2>Figures read first</h2>"
    yield _figures(summary, HEADLINE)
    yield f'<div class="two">{"".join(_pictures(summary))}</div>'
    yield '<h2 class="new">Hours and tonnes</h2>'
    yield f'<div class="two"><div>{_table(summary, "hours")}</div><div>{_table(summary, "tonnes")}'
    yield _picture("Hours of each day", pictures.hours_by_day(summary), "b") + "</div></div>"
    yield f"<h2>Catalyst</h2>{_table(summary, 'catalyst')}"
    yield '<h2 class="new">All figures</h2>'
    yield _figures(summary, None)
    yield '<h2 class="new">Compared with</h2>'
    yield _comparisons(summary)
    yield f"<h2>Against the healthy period</h2>{_table(summary, 'expectation')}"
    yield '<h2 class="new">Days</h2>'
    yield _table(summary, "days")
    yield '<h2 class="new">Figures by day</h2>'
    yield _by_day(summary)
    yield '<h2 class="new">Balance by day</h2>'
    yield '<div class="two wide">'
    yield _table(summary, "balances")
    yield _picture("Closures by day as read [%], 95 % interval", pictures.closures_by_day(summary), "c")
    yield "</div>"
    yield '<h2 class="new">Instruments and operating point</h2>'
    yield _table(summary, "instruments")
    yield f"<h2>Alerts</h2><p>{_counted(summary)}</p>{_table(summary, 'alerts')}"
    for name, heading in (("exclusions", "Left out"), ("words", "Events and notes")):
        yield f"<h2>{heading}</h2>{_table(summary, name)}"
    yield '<h2 class="new">What this was made from</h2>'
    yield _table(summary, "identity")
    yield "<h2>What the words mean</h2>"
    yield _table(summary, "definitions")
    yield "<footer>" + "".join(f"<p>{escape(one)}</p>" for one in CAUTIONS) + "</footer>"


def _head(summary: Summary) -> str:
    """Title, span, revision, and who prepared it."""
    told = summary.tables["identity"].set_index("item")["text"]
    words = (
        f"{revision_words(summary)}; prepared by {told['prepared by']}; record until {told['record until']}"
    )
    return (
        f"<header><div><h1>{_text(summary.unit_name)}</h1>"
        f'<div class="quiet">{_text(told["catalyst"])}</div></div>'
        f'<div class="span"><strong>{_text(summary.span_name)}</strong>'
        f'<div class="quiet" style="font-size:8.5pt">{_text(words)}</div></div></header>'
    )


def _pictures(summary: Summary) -> Iterable[str]:
    """The charts of the first page, each with its caption."""
    table, days = summary.tables["comparisons"], names(summary.tables["days"])
    there = set(summary.tables["figures"]["figure"])
    specs = {
        f"{_begun(name)} by day [%], steady with 95 % interval; open: as operated": pictures.figure_by_day(
            summary, name, _targets(table, name)
        )
        for name in ("yield on feed", "selectivity on converted", "conversion")
        if name in there
    }
    made = [name for name in days if name.endswith(" made [t]")][:1]
    specs |= {f"{_begun(name)} by day": pictures.tonnes_by_day(summary, name) for name in made}
    yield from (_picture(caption, spec, f"a{place}") for place, (caption, spec) in enumerate(specs.items()))


def _begun(text: str) -> str:
    return text[:1].upper() + text[1:]


def _counted(summary: Summary) -> str:
    """The counts of alerts in one line."""
    counts = rows(summary.tables["alert counts"])
    return "; ".join(f"{_text(row['item'])} {_number(row['number'], 0)}" for row in counts)


def _picture(caption: str, spec: Spec, name: str) -> str:
    return f"<figure><figcaption>{escape(caption)}</figcaption>{pictures.svg(spec, name)}</figure>"


def _targets(table: pd.DataFrame, figure: str) -> dict[str, float]:
    """Budget and guarantee of a figure, by the word that is written at their rules."""
    rows = table[(table["figure"] == figure) & table["against"].isin(["budget", "guarantee"])]
    return {
        f"{against} {value:g}": value
        for against, value in zip(rows["against"], rows["steady there"], strict=True)
    }


def _figures(summary: Summary, wanted: Sequence[str] | None) -> str:
    """Figures as operated and steady side by side: value, coverage, spread, best and worst day."""
    table, places = summary.tables["figures"], decimals(summary, "figures")
    fields = ("value", "coverage", "spread", "best day", "worst day")
    stretches = len(set(table["stretch"])) > 1
    body = []
    for at, row in enumerate(rows(table)):
        if wanted is not None and row["figure"] not in wanted:
            continue
        cells = f"<td>{_text(row['stretch'])}</td>" if stretches else ""
        cells += f"<td>{_text(row['figure'])}</td><td>{_text(row['unit'])}</td>"
        cells += "".join(_of_mode(row, mode, places[mode][at]) for mode in MODES)
        body.append(f"<tr>{cells}</tr>")
    first = ("stretch", "figure", "unit") if stretches else ("figure", "unit")
    return _framed(_grouped(first, MODES, fields), body)


def _of_mode(row: Row, mode: str, digits: int) -> str:
    """The cells of one figure in one mode; a remark stands under its value."""
    remark = f'<div class="word">{_text(row[f"{mode} remark"])}</div>' if row[f"{mode} remark"] else ""
    coverage = _number(row[f"{mode} coverage [%]"], 0, "\u202f%")
    cells = _cell(_measured(row[mode], row[f"{mode} ±"], digits) + remark) + _cell(coverage)
    cells += _cell(_number(row[f"{mode} spread"], digits))
    for what in ("best", "worst"):
        day = str(row[f"{mode} {what} day"])[5:]
        shown = _number(row[f"{mode} {what}"], digits)
        cells += _cell(f'{shown} <span class="quiet">{_text(day)}</span>')
    return cells


def _comparisons(summary: Summary) -> str:
    """Differences against every reference, both modes, with both half-widths."""
    table, places = summary.tables["comparisons"], decimals(summary, "comparisons")
    if table.empty:
        return f'<p class="quiet">{NOTHING["comparisons"]}</p>'
    fields = ("there", "difference", "± if nothing was calibrated", "word")
    body, group = [], ""
    for at, row in enumerate(rows(table)):
        named = f"{row['stretch']}, compared with {row['against']}"
        if named != group:
            group = named
            whole = 2 + len(MODES) * len(fields)
            body.append(f'<tr class="stretch"><td colspan="{whole}">{_text(named)}</td></tr>')
        cells = f"<td>{_text(row['figure'])}</td><td>{_text(row['unit'])}</td>"
        cells += "".join(
            _apart(row, mode, {name: column[at] for name, column in places.items()}) for mode in MODES
        )
        body.append(f"<tr>{cells}</tr>")
    return _framed(_grouped(("figure", "unit"), MODES, fields), body)


def _apart(row: Row, mode: str, places: Mapping[str, int]) -> str:
    """The cells of one difference in one mode."""
    digits, same = places[f"{mode} difference"], f"{mode} ± if nothing was calibrated"
    apart = _measured(row[f"{mode} difference"], row[f"{mode} difference ±"], digits, sign=True)
    cells = (
        _cell(_number(row[f"{mode} there"], digits)) + _cell(apart) + _cell(_number(row[same], places[same]))
    )
    return f'{cells}<td class="word">{_text(row[f"{mode} word"])}</td>'


def _by_day(summary: Summary) -> str:
    """The figures read first by day; the workbook holds all of them."""
    table, places = summary.tables["figures by day"], decimals(summary, "figures by day")
    there = [one for one in HEADLINE if any(title.startswith(f"{one} | ") for title in names(table))]
    both = [f"{name} | {mode} | " for name in there for mode in MODES]
    titles = {head: next(one for one in names(table) if one.startswith(head)) for head in both}
    body = []
    for at, row in enumerate(rows(table)):
        cells = "".join(
            _cell(_measured(row[title], row[f"{head}±"], places[title][at])) for head, title in titles.items()
        )
        body.append(f"<tr><td>{_text(row['day'])}</td>{cells}</tr>")
    return _framed(_grouped(("day",), there, MODES), body)


def _table(summary: Summary, name: str) -> str:
    """One table as it is, or the columns of it that a page has room for."""
    frame, places = summary.tables[name], decimals(summary, name)
    if frame.empty:
        return f'<p class="quiet">{NOTHING.get(name, "")}</p>'
    alone = "stretch" in frame and len(set(frame["stretch"])) == 1
    columns = SHOWN.get(name) or [column for column in names(frame) if column != "stretch" or not alone]
    kinds = {column: "n" if column in places else "long" if column in LONG else "t" for column in columns}
    head = "".join(f'<th class="{kinds[column]}">{_text(column)}</th>' for column in columns)
    body = []
    for at, row in enumerate(rows(frame)):
        cells = (
            f'<td class="{kinds[column]}">'
            f"{_number(row[column], places[column][at]) if column in places else _text(row[column])}</td>"
            for column in columns
        )
        body.append(f"<tr>{''.join(cells)}</tr>")
    return _framed(f"<tr>{head}</tr>", body)


def _grouped(first: Sequence[str], groups: Sequence[str], fields: Sequence[str]) -> str:
    """Two rows of headings: some columns, then the same fields under each group."""
    start = "".join(f'<th rowspan="2">{_text(one)}</th>' for one in first)
    head = "".join(f'<th class="group" colspan="{len(fields)}">{_text(one)}</th>' for one in groups)
    under = "".join(
        f'<th class="{"" if one == "word" else "n"}">{one}</th>' for _ in groups for one in fields
    )
    return f"<tr>{start}{head}</tr><tr>{under}</tr>"


def _framed(head: str, body: Iterable[str]) -> str:
    return f"<table><thead>{head}</thead><tbody>{''.join(body)}</tbody></table>"


def _cell(text: str) -> str:
    return f'<td class="n">{text}</td>'


def _measured(value: float, half_width: float, digits: int, *, sign: bool = False) -> str:
    """A value with its half-width, or a dash."""
    if math.isnan(value):
        return DASH
    lead = "+" if sign and round(value, digits) > 0 else ""
    tail = "" if math.isnan(half_width) else f" ± {number(half_width, digits)}"
    return f"{lead}{number(value, digits)}{tail}"


def _number(value: float, digits: int, unit: str = "") -> str:
    return DASH if math.isnan(value) else f"{number(value, digits)}{unit}"


def _text(value: object) -> str:
    """A text that came from outside, made harmless for the page and for a spreadsheet it is pasted into."""
    return escape(neutral(str(value)))
