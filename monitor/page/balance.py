"""How well the atom balance closes, and what it says about the instruments."""

from __future__ import annotations

from datetime import timedelta
from html import escape

import pandas as pd
import streamlit as st

from ingest.unit import Unit
from monitor import board, charts, witnesses, wording
from monitor.charts import Panel
from monitor.figures import Figure
from monitor.page import data, details, shell, spans

Shown = tuple[pd.Timestamp, pd.Timestamp]
DAY = timedelta(hours=24)
CLOSURE_HEIGHT, FIT_HEIGHT = 130, 170
FIT_MARKS = 200  # cell by cell it is noise; least and greatest are drawn all the same


def view() -> None:
    """Draw the third view; the part below the choice refreshes by itself."""
    unit = shell.unit()
    known = data.span(unit) if data.version() else None
    if known is None:
        shell.nothing_yet()
        return
    spans.pick()
    first, last = spans.chosen(unit, known)
    if first >= last:
        shell.ends_before_it_begins()
        return
    _body(unit.key, (first, last))


@st.fragment(run_every=shell.REFRESH)
def _body(key: str, span: Shown) -> None:
    unit = data.units()[key]
    known = data.span(unit)
    if known is None:
        return
    left, right = st.columns([1, 1], gap="large")
    with left:
        _closures(unit, span)
        _fit(unit, span)
    with right:
        _instruments(unit, known)


def _closures(unit: Unit, span: Shown) -> None:
    """Raw closures with their interval."""
    shell.write(
        "<h2>Raw closures</h2><p class='quiet'>Out over in by readings alone, before anything was adjusted, "
        "with the 95 % interval that follows from the instruments' uncertainties. An interval that holds "
        "100 % is no evidence of a fault. Windows of 8 h, as operated.</p>"
    )
    found = [figure for name, figure in data.figures(unit).items() if name.endswith("closure")]
    for index, figure in enumerate(found):
        _closure(unit, figure, span, lowest=index == len(found) - 1)


def _closure(unit: Unit, figure: Figure, span: Shown, *, lowest: bool) -> None:
    panel = details.panel(unit, figure, board.watch_on(unit, figure.name), *span, steady=False)
    panel = panel.resized(CLOSURE_HEIGHT, axis=lowest, brush=False)
    frame = data.figure(unit, board.SHIFT, (figure.name, board.MODES[0]), *span)
    details.heading(figure, _verdict(frame, figure))
    line = charts.drawn(frame, panel)
    if line["mean"].notna().any():
        shell.draw(charts.trend(line, panel), f"closure {figure.name}")
    else:
        shell.empty("Nothing to show in this span.", details.why(frame))


def _verdict(frame: pd.DataFrame, figure: Figure) -> str:
    """Newest closure, and whether its interval holds 100 %."""
    there = frame.dropna(subset=["value"])
    if there.empty:
        return "no value in this span"
    value, half = (float(there[field].iloc[-1]) for field in ("value", "half_width"))
    closes = abs(value - 100) <= half
    shape = wording.SHAPES["within" if closes else ("above" if value > 100 else "below")]
    words = "closes within its interval" if closes else "does not close within its interval"
    return f"{wording.amount(value, half, figure.unit)}  {shape} {words}"


def _fit(unit: Unit, span: Shown) -> None:
    """How well all readings of a cell fit one balance."""
    frame = data.fit(unit, *span)
    share = witnesses.judged(frame)
    said = (
        "no cell can be judged"
        if pd.isna(share)
        else f"{100 * share:.0f} % of cells lie above; chance gives 5 %"
    )
    shell.write(
        f"<h2>Fit of the balance</h2><p class='quiet'>Sum of squared adjustments over degrees of freedom, "
        f"cell by cell. Dashed: what chi-square allows in 95 % of cells. In this span {said}.</p>"
    )
    conditions = data.operating(unit, *span)
    panel = Panel(
        title="objective per degree of freedom", unit="", first=span[0], last=span[1],
        zone=unit.time_zone, ink=shell.ink(), height=FIT_HEIGHT,
        shaded=board.shaded(conditions, steady=False, zone=unit.time_zone),
    )  # fmt: skip
    line = charts.drawn(frame, panel, most=FIT_MARKS)
    if line["mean"].notna().any():
        bound = frame[["bound", "half_width"]].set_axis(["value", "half_width"], axis=1)
        bound = charts.drawn(bound, panel, most=FIT_MARKS)
        shell.draw(charts.fit(line, bound, panel), "fit")
    else:
        shell.empty("No cell was reconciled in this span.", "Look at Now for the operating condition.")


def _instruments(unit: Unit, known: data.Span) -> None:
    """What each instrument was adjusted by over the last day, drawn and as a table."""
    table = data.adjusted(unit, known.last - DAY, known.last)
    shell.write(
        "<h2>What each instrument was adjusted by, last 24 h</h2><p class='quiet'>In standard uncertainties "
        "of the instrument. Point: mean; bar: 90 % of cells; pale: reach expected if nothing is wrong. An "
        "instrument that stands out need not be the sick one: those it is compared with are suspects too."
        "</p>"
    )
    if table["mean"].isna().all():
        shell.empty(
            "No reading took part in a balance in the last 24 h.", "Look at Now for the operating condition."
        )
        return
    shell.draw(charts.adjustment_strip(table, shell.ink()), "adjustments")
    shell.write(_instrument_table(table))


def _instrument_table(table: pd.DataFrame) -> str:
    """The same in numbers, for the keyboard and for print."""
    heads = ("instrument", "mean", "5 % to 95 % of cells", "expected within", "cells present", "what it says")
    head = "".join(f"<th scope='col'{_css(place)}>{text}</th>" for place, text in enumerate(heads))
    lines = "".join(_instrument_row(str(name), row) for name, row in table.iterrows())
    return f"<table><thead><tr>{head}</tr></thead><tbody>{lines}</tbody></table>"


def _instrument_row(name: str, row: pd.Series) -> str:
    css = " class='alarm'" if row["word"] == "stands out" else ""
    if row["word"] == "no reading":
        cells = ["\u2013", "\u2013", "\u2013"]
    else:
        mean, low, high = (wording.number(float(row[field]), 2) for field in ("mean", "low", "high"))
        reach = (
            "\u2013" if row["word"] == "not redundant" else f"±{wording.number(float(row['expected']), 2)}"
        )
        cells = [mean, f"{low} to {high}", reach]
    numbers = "".join(f"<td{_css(place)}>{cell}</td>" for place, cell in enumerate(cells, start=1))
    present = f"{100 * float(row['share']):.0f} %"
    return (
        f"<tr><th scope='row'>{escape(name)}</th>{numbers}<td>{present}</td>"
        f"<td{css}>{escape(witnesses.WORDS[row['word']])}</td></tr>"
    )


def _css(column: int) -> str:
    """The spread of cells is left out on a phone."""
    return " class='wide'" if column == 2 else ""
