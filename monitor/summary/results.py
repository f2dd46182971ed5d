"""The figures of a span, as operated and steady side by side, with the spread of its days."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np
import pandas as pd

from ingest.unit import Unit
from monitor.figures import Figure
from monitor.summary.record import Record
from monitor.summary.span import Span, Stretch
from monitor.tallies import idle_in
from monitor.windows import MODES, REASONS, span_figures

SELECTIVITY = "selectivity on converted"
LEAST_COVERAGE = 0.75  # of the running time; below it a span does not stand for itself
LEAST_DAYS = 5.0  # of time that counts; a span with no more is told, and is not called representative
PER_MODE = (
    "",
    " ±",
    " coverage [%]",
    " days",
    " spread",
    " best",
    " best day",
    " worst",
    " worst day",
    " remark",
)


def routes_of(unit: Unit, figures: Sequence[Figure]) -> tuple[Figure, ...]:
    """Give selectivity by raw readings along both routes, to stand beside the reconciled one.

    Parameters
    ----------
    unit : Unit
        One reactor.
    figures : sequence of Figure
        Its figures.

    Returns
    -------
    tuple of Figure
        None where the key element is not read everywhere, so that there are no raw routes.
    """
    element = unit.key_element
    whole = next((one for one in figures if one.name == SELECTIVITY), None)
    made = f"raw made {element} in {unit.wanted}"
    if whole is None or not {made, f"raw consumed {element}"} <= set(whole.amounts):
        return ()
    return tuple(
        replace(
            whole,
            name=f"selectivity by raw {what}",
            label=f"{whole.label}, by raw {what}",
            numerator={made: 1.0},
            denominator={f"raw {over} {element}": 1.0},
            scale=100.0,
            definition=f"Share of {words} that is in the {unit.wanted} made, by readings as they are.",
        )
        for what, over, words in (
            ("products", "made", f"{element} in all products made"),
            ("difference", "consumed", f"{element} in the {unit.key_reactant} consumed"),
        )
    )


def by_day(unit: Unit, span: Span, record: Record, figures: Sequence[Figure]) -> pd.DataFrame:
    """Judge every figure of every day.

    Parameters
    ----------
    unit : Unit
        One reactor.
    span : Span
    record : Record
    figures : sequence of Figure

    Returns
    -------
    DataFrame
        Index day; columns (figure, mode, field) as `windows.span_figures` gives them.
    """
    frame = span_figures(unit, record.amounts, figures, span.edges_us, unsolved=record.unsolved)
    return frame.set_axis(pd.Index(span.days, name="day"))


def of_stretch(
    unit: Unit, span: Span, record: Record, figures: Sequence[Figure], *, stretch: Stretch, days: pd.DataFrame
) -> pd.DataFrame:
    """Judge every figure of one stretch of a span, with what its days say.

    Parameters
    ----------
    unit : Unit
        One reactor.
    span : Span
    record : Record
    figures : sequence of Figure
    stretch : Stretch
    days : DataFrame
        As `by_day` gives it; only days that lie in the stretch as a whole count for spread, best and worst.

    Returns
    -------
    DataFrame
        Columns stretch, figure, unit, then those of `PER_MODE` for both modes. NaN where the figure is
        missing; the remark says why, or why it does not stand for the span.
    """
    edges = np.array([stretch.first_us, stretch.last_us], dtype=np.int64)
    row = span_figures(unit, record.amounts, figures, edges, unsolved=record.unsolved).iloc[0]
    whole = (span.edges_us[:-1] >= stretch.first_us) & (span.edges_us[1:] <= stretch.last_us)
    columns: dict[str, list[object]] = {
        "stretch": [stretch.name] * len(figures),
        "figure": [one.name for one in figures],
        "unit": [one.unit for one in figures],
    }
    for mode in MODES:
        told = [
            _of_mode(figure, row[figure.name, mode], days.loc[whole, (figure.name, mode)])
            for figure in figures
        ]
        hours = _counted_h(unit, record, stretch, mode)
        for place, suffix in enumerate(PER_MODE[:-1]):
            columns[mode + suffix] = [one[place] for one in told]
        columns[f"{mode} remark"] = [remark(row[one.name, mode], hours) for one in figures]
    return pd.DataFrame(columns)


def remark(told: pd.Series, hours: float) -> str:
    """Say why a figure is missing, or why it does not stand for its span; empty where neither holds.

    Parameters
    ----------
    told : Series
        Fields reason and coverage of one figure in one mode.
    hours : float
        Time of the mode that the record should hold [h].

    Returns
    -------
    str
    """
    reason = REASONS[int(told["reason"])]
    if reason:
        return reason
    coverage = float(told["coverage"])
    days = coverage * hours / 24
    if coverage < LEAST_COVERAGE:
        return f"not representative: coverage {100 * coverage:.0f} %"
    return f"not representative: {days:.1f} days" if days <= LEAST_DAYS else ""


def _counted_h(unit: Unit, record: Record, stretch: Stretch, mode: str) -> float:
    """Time of a mode in a stretch [h]; what the record does not hold counts as running."""
    start, operating = record.cells.start, record.amounts.operating
    inside = (start >= stretch.first_us) & (start < stretch.last_us)
    idle = idle_in(operating[inside])[MODES.index(mode)].sum() * unit.cell.total_seconds() / 3600
    return (stretch.last_us - stretch.first_us) / 3.6e9 - float(idle)


def _of_mode(figure: Figure, told: pd.Series, days: pd.DataFrame) -> tuple[object, ...]:
    """Value, half-width and coverage, then what the days say: how many, spread, best and worst."""
    values = days["value"].dropna()
    own = (told["value"], told["half_width"], 100 * told["coverage"], len(values))
    if values.empty:
        return (*own, np.nan, np.nan, "", np.nan, "")
    # Where neither direction is good, greatest and least stand in the places of best and worst.
    ranked = values.sort_values(ascending=figure.higher_is_better is False, kind="stable")
    best, worst = (str(ranked.index[place]) for place in (0, -1))
    spread = values.std(ddof=1) if len(values) > 1 else np.nan
    return (*own, spread, ranked.iloc[0], best, ranked.iloc[-1], worst)
