"""The tables of a summary as HTML, alike on paper and on the screen."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping, Sequence
from html import escape
from typing import Any

from monitor.celltext import neutral
from monitor.summary.digits import decimals
from monitor.summary.table import Summary, names, rows
from monitor.summary.workbook import HEADLINE
from monitor.windows import MODES
from monitor.wording import number

Row = Mapping[str, Any]
DASH = "\u2013"
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


def figures(summary: Summary, wanted: Sequence[str] | None) -> str:
    """Write figures as operated and steady side by side: value, coverage, spread, best and worst day.

    Parameters
    ----------
    summary : Summary
    wanted : sequence of str or None
        Names of figures; None for all.

    Returns
    -------
    str
        HTML; a remark stands under its value.
    """
    frame, places = summary.tables["figures"], decimals(summary, "figures")
    fields = ("value", "coverage", "spread", "best day", "worst day")
    stretches = len(set(frame["stretch"])) > 1
    body = []
    for at, row in enumerate(rows(frame)):
        if wanted is not None and row["figure"] not in wanted:
            continue
        cells = f"<td>{text(row['stretch'])}</td>" if stretches else ""
        cells += f"<td>{text(row['figure'])}</td><td>{text(row['unit'])}</td>"
        cells += "".join(_of_mode(row, mode, places[mode][at]) for mode in MODES)
        body.append(f"<tr>{cells}</tr>")
    first = ("stretch", "figure", "unit") if stretches else ("figure", "unit")
    return _framed(_grouped(first, MODES, fields), body)


def _of_mode(row: Row, mode: str, digits: int) -> str:
    """The cells of one figure in one mode; a remark stands under its value."""
    remark = f'<div class="word">{text(row[f"{mode} remark"])}</div>' if row[f"{mode} remark"] else ""
    coverage = _number(row[f"{mode} coverage [%]"], 0, "\u202f%")
    cells = _cell(_measured(row[mode], row[f"{mode} ±"], digits) + remark) + _cell(coverage)
    cells += _cell(_number(row[f"{mode} spread"], digits))
    for what in ("best", "worst"):
        day = str(row[f"{mode} {what} day"])[5:]
        shown = _number(row[f"{mode} {what}"], digits)
        cells += _cell(f'{shown} <span class="quiet">{text(day)}</span>')
    return cells


def comparisons(summary: Summary) -> str:
    """Write the differences from every reference, both modes, with both half-widths.

    Parameters
    ----------
    summary : Summary

    Returns
    -------
    str
        HTML.
    """
    frame, places = summary.tables["comparisons"], decimals(summary, "comparisons")
    if frame.empty:
        return f'<p class="quiet">{NOTHING["comparisons"]}</p>'
    fields = ("there", "difference", "± if nothing was calibrated", "word")
    body, group = [], ""
    for at, row in enumerate(rows(frame)):
        named = f"{row['stretch']}, compared with {row['against']}"
        if named != group:
            group = named
            whole = 2 + len(MODES) * len(fields)
            body.append(f'<tr class="stretch"><td colspan="{whole}">{text(named)}</td></tr>')
        cells = f"<td>{text(row['figure'])}</td><td>{text(row['unit'])}</td>"
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
    return f'{cells}<td class="word">{text(row[f"{mode} word"])}</td>'


def by_day(summary: Summary) -> str:
    """Write the figures read first by day; the workbook holds all of them.

    Parameters
    ----------
    summary : Summary

    Returns
    -------
    str
        HTML.
    """
    frame, places = summary.tables["figures by day"], decimals(summary, "figures by day")
    there = [one for one in HEADLINE if any(title.startswith(f"{one} | ") for title in names(frame))]
    both = [f"{name} | {mode} | " for name in there for mode in MODES]
    titles = {head: next(one for one in names(frame) if one.startswith(head)) for head in both}
    body = []
    for at, row in enumerate(rows(frame)):
        cells = "".join(
            _cell(_measured(row[title], row[f"{head}±"], places[title][at])) for head, title in titles.items()
        )
        body.append(f"<tr><td>{text(row['day'])}</td>{cells}</tr>")
    return _framed(_grouped(("day",), there, MODES), body)


def table(summary: Summary, name: str) -> str:
    """Write one table as it is, or the columns of it that a page has room for.

    Parameters
    ----------
    summary : Summary
    name : str
        Of the table.

    Returns
    -------
    str
        HTML; words where it has no rows.
    """
    frame, places = summary.tables[name], decimals(summary, name)
    if frame.empty:
        return f'<p class="quiet">{NOTHING.get(name, "")}</p>'
    alone = "stretch" in frame and len(set(frame["stretch"])) == 1
    columns = SHOWN.get(name) or [column for column in names(frame) if column != "stretch" or not alone]
    kinds = {column: "n" if column in places else "long" if column in LONG else "t" for column in columns}
    head = "".join(f'<th class="{kinds[column]}">{text(column)}</th>' for column in columns)
    body = []
    for at, row in enumerate(rows(frame)):
        cells = (
            f'<td class="{kinds[column]}">'
            f"{_number(row[column], places[column][at]) if column in places else text(row[column])}</td>"
            for column in columns
        )
        body.append(f"<tr>{''.join(cells)}</tr>")
    return _framed(f"<tr>{head}</tr>", body)


def _grouped(first: Sequence[str], groups: Sequence[str], fields: Sequence[str]) -> str:
    """Two rows of headings: some columns, then the same fields under each group."""
    start = "".join(f'<th rowspan="2">{text(one)}</th>' for one in first)
    head = "".join(f'<th class="group" colspan="{len(fields)}">{text(one)}</th>' for one in groups)
    under = "".join(
        f'<th class="{"" if one == "word" else "n"}">{one}</th>' for _ in groups for one in fields
    )
    return f"<tr>{start}{head}</tr><tr>{under}</tr>"


def _framed(head: str, body: Iterable[str]) -> str:
    return f"<table><thead>{head}</thead><tbody>{''.join(body)}</tbody></table>"


def _cell(inner: str) -> str:
    return f'<td class="n">{inner}</td>'


def _measured(value: float, half_width: float, digits: int, *, sign: bool = False) -> str:
    """A value with its half-width, or a dash."""
    if math.isnan(value):
        return DASH
    lead = "+" if sign and round(value, digits) > 0 else ""
    tail = "" if math.isnan(half_width) else f" ± {number(half_width, digits)}"
    return f"{lead}{number(value, digits)}{tail}"


def _number(value: float, digits: int, unit: str = "") -> str:
    return DASH if math.isnan(value) else f"{number(value, digits)}{unit}"


def text(value: object) -> str:
    """Make a text that came from outside harmless for a page and for a spreadsheet it is pasted into.

    Parameters
    ----------
    value : object

    Returns
    -------
    str
        HTML.
    """
    return escape(neutral(str(value)))


def counted(summary: Summary) -> str:
    """Write the counts of alerts in one line.

    Parameters
    ----------
    summary : Summary

    Returns
    -------
    str
        HTML.
    """
    counts = rows(summary.tables["alert counts"])
    return "; ".join(f"{text(row['item'])} {_number(row['number'], 0)}" for row in counts)
