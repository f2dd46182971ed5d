"""What every number opens to, and the panel that a figure is drawn on; shared by the views."""

from __future__ import annotations

from collections.abc import Mapping
from datetime import datetime
from html import escape

import pandas as pd
import streamlit as st

from ingest.unit import Unit, Watch
from monitor import board, wording
from monitor.board import MODES, SHIFT, Reading, Row
from monitor.charts import Panel
from monitor.figures import Figure
from monitor.page import data, shell
from monitor.windows import REASONS


def value(reading: Reading | None, unit: str) -> str:
    """Write a reading, or the reason why there is none.

    Parameters
    ----------
    reading : Reading or None
        None when there is no window at all.
    unit : str
        Of the figure.

    Returns
    -------
    str
        HTML.
    """
    if reading is None or reading.reason:
        short = wording.MISSING[reading.reason if reading else ""][0]
        return f'<span class="quiet">\u25c7 {escape(short)}</span>'
    return escape(wording.amount(reading.value, reading.half_width, unit))


def panel(
    unit: Unit,
    figure: Figure,
    watch: Watch | None,
    first: datetime,
    last: datetime,
    *,
    steady: bool,
    only: str = "",
) -> Panel:
    """Give the panel of a figure: limits, episodes of its watches, time that does not count.

    Parameters
    ----------
    unit : Unit
        One reactor.
    figure : Figure
        What is drawn.
    watch : Watch or None
        Whose limits are drawn.
    first, last : datetime
        Span, zone-aware.
    steady : bool
        Whether the steady figure is drawn, which leaves out more time.
    only : str
        The watch whose episodes are marked; empty for those of all watches on the figure.

    Returns
    -------
    Panel
        In the ink of the theme.
    """
    known = data.span(unit)
    end = known.last if known else pd.Timestamp(last)
    found = data.episodes(unit)
    mine = found[(found["watch"] == only) if only else (found["figure"] == figure.name)]
    spans = data.operating(unit, first, last)
    return Panel(
        title=figure.label,
        unit=figure.unit,
        first=pd.Timestamp(first),
        last=pd.Timestamp(last),
        zone=unit.time_zone,
        ink=shell.ink(),
        low=watch.low if watch else None,
        high=watch.high if watch else None,
        reference=100.0 if figure.name.endswith("closure") else None,
        shaded=board.shaded(spans, steady=steady, zone=unit.time_zone),
        episodes=board.marked(
            mine, data.figures(unit), now=end, zone=unit.time_zone, drifts=board.drift_watches(unit)
        ),
    )


def popover(unit: Unit, row: Row, known: data.Span) -> None:
    """Draw what a key figure opens to: definition, all windows and modes, how they were worked out.

    Parameters
    ----------
    unit : Unit
        One reactor.
    row : Row
        The figure.
    known : Span
        Time that the store knows.
    """
    with st.popover(f"**{row.figure.label}**", type="tertiary", key=f"how {row.figure.name}"):
        sums = _amounts(unit, row)
        shell.write(_definition(row.figure, sums) + _table(unit, row) + _limits(row) + _end(unit, known))


def _definition(figure: Figure, sums: tuple[str, str] = ("", "")) -> str:
    """What the figure is a ratio of, with the sums themselves where they are known."""
    facts = {
        "definition": figure.definition,
        "numerator": _sum(figure.numerator) + sums[0],
        "denominator": _sum(figure.denominator) + sums[1]
        if figure.denominator
        else "running hours" + sums[1],
        "value": f"{figure.scale:.6g} times numerator over denominator [{figure.unit}]",
        "half-width": "95 %; random part over independent results, calibration part undivided",
    }
    rows = "".join(f"<dt>{name}</dt><dd>{escape(text)}</dd>" for name, text in facts.items())
    return f"<dl>{rows}</dl>"


def _amounts(unit: Unit, row: Row) -> tuple[str, str]:
    """Numerator and denominator of the shift's window in numbers."""
    table, place = data.sums(unit, SHIFT), (row.figure.name, board.mode_of(row.watch))
    if place not in table.index:
        return "", ""
    units = ("kmol", "kmol") if row.figure.denominator else ("t", "h")
    found = [float(table[field].loc[place]) for field in ("numerator", "denominator")]
    said = [
        f" = {wording.amount(amount, float('nan'), unit)}" if pd.notna(amount) else ""
        for amount, unit in zip(found, units, strict=True)
    ]
    return said[0], said[1]


def _sum(weights: Mapping[str, float]) -> str:
    """Write a weighted sum of amounts."""
    parts = [
        name if weight == 1 else f"{weight:+.4g} times {name}" for name, weight in weights.items() if weight
    ]
    return " ".join(parts)


def _table(unit: Unit, row: Row) -> str:
    """Every window in both modes with its coverage."""
    heads = "".join(
        f"<th scope='col'>{mode}</th><th scope='col' class='wide'>coverage</th>" for mode in MODES
    )
    lines = "".join(
        f"<tr><th scope='row'>{wording.window(window)}</th>"
        + "".join(_two(row.readings.get((window, mode)), row.figure.unit) for mode in MODES)
        + "</tr>"
        for window in unit.windows
    )
    return f"<table><thead><tr><th scope='col'>window</th>{heads}</tr></thead><tbody>{lines}</tbody></table>"


def _two(reading: Reading | None, unit: str) -> str:
    covered = f"{100 * reading.coverage:.0f} %" if reading and pd.notna(reading.coverage) else "\u2013"
    return f"<td>{value(reading, unit)}</td><td class='wide'>{covered}</td>"


def _limits(row: Row) -> str:
    watch = row.watch
    if watch is None:
        return "<p class='quiet'>No watch in the unit file names this figure.</p>"
    return (
        f"<p class='quiet'>Watched: {wording.window(watch.window)}, {board.mode_of(watch)}, "
        f"{escape(wording.limits(watch.low, watch.high, row.figure.unit))}; raised after "
        f"{wording.duration(watch.on_delay)}, cleared after {wording.duration(watch.off_delay)} "
        f"with {wording.plain(watch.deadband)} {row.figure.unit} to spare; {watch.priority} priority.</p>"
    )


def _end(unit: Unit, known: data.Span) -> str:
    end = wording.local_time(known.last.to_pydatetime(), unit.time_zone)
    return (
        f"<p class='quiet'>Windows end {end}. Coverage: share of the window's running time with a valid "
        f"balance; below {100 * unit.least_coverage:.0f} % nothing is shown. Balance solved in cells of "
        f"{wording.duration(unit.cell)}.</p>"
    )


def heading(figure: Figure, words: str) -> None:
    """Write a figure's name with what is to be said of it, and let it open to its definition.

    Parameters
    ----------
    figure : Figure
        The figure.
    words : str
        Behind the name.
    """
    with st.container(horizontal=True, vertical_alignment="center", gap="small"):
        shell.write(f"<p><strong>{escape(figure.label)}</strong> &ensp;{escape(words)}</p>", width="content")
        with st.popover("Definition", type="tertiary", key=f"definition {figure.name}"):
            shell.write(_definition(figure))


def why(frame: pd.DataFrame) -> str:
    """Say why a span shows nothing: the commonest reason among its windows.

    Parameters
    ----------
    frame : DataFrame
        As `data.figure` gives it.

    Returns
    -------
    str
        A sentence.
    """
    if frame.empty:
        return "The store holds no window that ends in this span; choose another one."
    code = int(frame["reason"].mode().iloc[0])
    return wording.MISSING[REASONS[code]][1]


def table(line: pd.DataFrame, figure: Figure) -> pd.DataFrame:
    """Give what a chart draws as a table for reading, newest first.

    Parameters
    ----------
    line : DataFrame
        As `charts.drawn` gives it.
    figure : Figure
        Gives the unit.

    Returns
    -------
    DataFrame
        Plant time, mean, half-width, least, greatest [figure's unit].
    """
    names = {
        "when": "plant time", "mean": f"mean [{figure.unit}]", "half_width": "half-width (95 %)",
        "low": "least", "high": "greatest",
    }  # fmt: skip
    return line.dropna(subset=["mean"])[::-1][list(names)].rename(columns=names).round(4)
