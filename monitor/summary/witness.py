"""What speaks for and against the data of a span: closures and fit by day, instruments, the alerts raised."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence

import numpy as np
import pandas as pd

from ingest.balance import Problem
from ingest.cells import DOWN
from ingest.conditions import CONDITIONS, takes_part
from ingest.journal import Line
from ingest.unit import Unit
from monitor.alerts import CLOSE, Alert
from monitor.figures import Figure
from monitor.summary.record import Record
from monitor.summary.span import Span
from monitor.witnesses import adjustments, fit

CLOSURE = " closure"
OUTCOMES = ("confirmed", "false", "open")


def balances(
    unit: Unit, span: Span, record: Record, figures: Sequence[Figure], days: pd.DataFrame
) -> pd.DataFrame:
    """Tell day by day how well the balance closed and fitted.

    Parameters
    ----------
    unit : Unit
        Gives the cell.
    span : Span
    record : Record
    figures : sequence of Figure
    days : DataFrame
        As `results.by_day` gives it.

    Returns
    -------
    DataFrame
        One row per day: hours solved and not solved, share of cells whose objective lies above what
        chi-square allows 19 times in 20 [%], and every raw closure as operated with its half-width [%].
    """
    start, cell_h = record.cells.start, unit.cell.total_seconds() / 3600
    place = np.searchsorted(span.edges_us, start, side="right") - 1
    states = record.states
    fitted = fit(pd.Series(states.objective), pd.Series(states.freedom.astype(int)))
    known = np.isfinite(fitted["value"]) & np.isfinite(fitted["bound"])
    above = (fitted["value"] > fitted["bound"]) & known
    columns = {
        "balance solved [h]": _count(record.solved, place, span) * cell_h,
        "balance not solved [h]": _count(record.unsolved, place, span) * cell_h,
        "above bound [%]": _share(above.to_numpy(), known.to_numpy(), place, span),
    }
    for one in figures:
        if one.name.endswith(CLOSURE):
            columns[f"{one.name} [%]"] = days[one.name, "as operated", "value"].to_numpy()
            columns[f"{one.name} ± [%]"] = days[one.name, "as operated", "half_width"].to_numpy()
    return pd.DataFrame({"day": [f"{day}" for day in span.days], **columns})


def instruments(unit: Unit, problem: Problem, record: Record) -> pd.DataFrame:
    """Tell of every instrument what it read while the unit was not down, how good that was, how adjusted.

    Parameters
    ----------
    unit : Unit
        One reactor.
    problem : Problem
        Names the balance instruments.
    record : Record

    Returns
    -------
    DataFrame
        One row per instrument: mean, 5th and 95th percentile of the cells [its unit], share of the time that
        is not down by condition [%], mean adjustment and what it should stay within [standard uncertainties].
    """
    there = record.cells.operating != DOWN
    value = pd.DataFrame(record.cells.value[there])
    condition = record.cells.condition[there]
    table = pd.DataFrame(
        {
            "instrument": [one.name for one in unit.instruments],
            "tag": [one.tag or "" for one in unit.instruments],
            "kind": [one.kind for one in unit.instruments],
            "stream": [one.stream or "" for one in unit.instruments],
            "unit": [one.unit.removeprefix("-") for one in unit.instruments],
            "mean": value.mean().to_numpy(),
            "5 % below": value.quantile(0.05).to_numpy(),
            "5 % above": value.quantile(0.95).to_numpy(),
        }
    )
    seen = max(len(condition), 1)
    shares = [100 * (condition == code).sum(axis=0) / seen for code in range(len(CONDITIONS))]
    table["takes part [%]"] = 100 * takes_part(condition).sum(axis=0) / seen
    for name, share in zip(CONDITIONS, shares, strict=True):
        if share.any():
            table[f"{name} [%]"] = share
    frames = [pd.DataFrame(one[there], columns=list(problem.names)) for one in _adjusted(record)]
    told = adjustments(*frames)[["mean", "expected", "word"]]
    told.columns = pd.Index(["adjustment", "adjustment within", "verdict of the balance"])
    table = table.join(told, on="instrument")
    table["verdict of the balance"] = table["verdict of the balance"].fillna("no part of the balance")
    return table


def alerts(
    episodes: pd.DataFrame,
    closed: Mapping[tuple[str, str, pd.Timestamp], Line],
    span: Span,
    known_until: pd.Timestamp,
) -> pd.DataFrame:
    """List the alerts that stood in a span, with what people made of them.

    Parameters
    ----------
    episodes : DataFrame
        As `store.episodes` gives them.
    closed : mapping of (str, str, Timestamp) to Line
        By watch, side and raised: the journal's line with which a person closed an alert and named its cause.
    span : Span
    known_until : Timestamp
        End of the record; an open alert lasts until then.

    Returns
    -------
    DataFrame
        In the order in which they were raised; `outcome` is confirmed, false or open.
    """
    low, high = (pd.Timestamp(edge, unit="us", tz="UTC") for edge in (span.first_us, span.last_us))
    kept = episodes[(episodes["raised"] < high) & ~(episodes["cleared"] <= low)]
    kept = kept.sort_values(["raised", "watch", "side"], ignore_index=True)
    found = [closed.get(key) for key in zip(kept["watch"], kept["side"], kept["raised"], strict=True)]
    cleared = kept["cleared"].fillna(known_until)
    begun, ended = kept["raised"].where(kept["raised"] > low, low), cleared.where(cleared < high, high)
    frame = kept[["watch", "figure", "side", "limit", "priority", "raised", "cleared", "worst", "suppressed"]]
    return frame.assign(
        **{"hours": (ended - begun).dt.total_seconds() / 3600},
        **{"raised here": np.where(kept["raised"] >= low, "yes", "before")},
        suppressed=np.where(kept["suppressed"].astype(bool), "yes", "no"),
        outcome=[_outcome(line) for line in found],
        cause=[str(line.detail.get("cause", "")) if line else "" for line in found],
        by=[line.who if line else "" for line in found],
        note=[line.note if line else "" for line in found],
    )


def counts(alerts: pd.DataFrame) -> pd.DataFrame:
    """Count the alerts of a span by what became of them.

    Parameters
    ----------
    alerts : DataFrame
        As `alerts` lists them.

    Returns
    -------
    DataFrame
        Columns item and number; confirmed, false and open add up to those that stood.
    """
    raised = int((alerts["raised here"] == "yes").sum())
    told = {outcome: int((alerts["outcome"] == outcome).sum()) for outcome in OUTCOMES}
    numbers = {"stood in this span": len(alerts), "raised in it": raised, **told}
    return pd.DataFrame({"item": list(numbers), "number": [float(one) for one in numbers.values()]})


def closing(alerts: Iterable[Alert], lines: Iterable[Line]) -> dict[tuple[str, str, pd.Timestamp], Line]:
    """Find the lines with which people closed alerts.

    Parameters
    ----------
    alerts : iterable of Alert
        Of the unit.
    lines : iterable of Line
        Of its journal; of two lines about one alert the later counts.

    Returns
    -------
    dict of (str, str, Timestamp) to Line
        By watch, side and raised.
    """
    closed = {line.subject: line for line in lines if line.act == CLOSE}
    return {
        (one.watch, one.side, pd.Timestamp(one.raised)): closed[one.id] for one in alerts if one.id in closed
    }


def _outcome(line: Line | None) -> str:
    if line is None:
        return "open"
    return "false" if line.detail.get("cause") == "false" else "confirmed"


def _adjusted(record: Record) -> tuple[np.ndarray, np.ndarray]:
    return record.states.adjustment, record.states.adjustment_sd


def _count(flags: np.ndarray, place: np.ndarray, span: Span) -> np.ndarray:
    """Cells with a flag on each day."""
    return np.bincount(place[flags], minlength=len(span.days))[: len(span.days)].astype(float)


def _share(flags: np.ndarray, among: np.ndarray, place: np.ndarray, span: Span) -> np.ndarray:
    """Share of the cells of each day that have a flag [%]; NaN where there are none."""
    whole = _count(among, place, span)
    return 100 * _count(flags, place, span) / np.where(whole > 0, whole, np.nan)


def unavailable_h(unit: Unit, record: Record) -> dict[str, float]:
    """Give the hours, down time left out, in which no channel of an analyzer gave a usable reading.

    Parameters
    ----------
    unit : Unit
        One reactor.
    record : Record

    Returns
    -------
    dict of str to float
        By analyzer [h].
    """
    there = record.cells.operating != DOWN
    usable = takes_part(record.cells.condition)
    names = dict.fromkeys(one.analyzer for one in unit.instruments if one.analyzer)
    cell_h = unit.cell.total_seconds() / 3600
    channels = {name: [one.analyzer == name for one in unit.instruments] for name in names}
    return {
        str(name): float((there & ~usable[:, mask].any(axis=1)).sum() * cell_h)
        for name, mask in channels.items()
    }
