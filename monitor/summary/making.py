"""One unit over one span, from the store to the summary: the only place of it that reads."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path
from zoneinfo import ZoneInfo

import numpy as np
import pandas as pd

from ingest import journal
from ingest.balance import Problem, problem_of
from ingest.errors import StoreError
from ingest.journal import Line
from ingest.ledger import Store
from ingest.parts import instant_us
from ingest.snapshot import Snapshot
from ingest.unit import Unit
from monitor import desk, store, wording
from monitor.amounts import amount_names
from monitor.coarse import coarse_unit
from monitor.figures import Figure, figures_of
from monitor.summary import comparisons, exclusions, results, shortfall, span, terms, tonnes, witness
from monitor.summary.charge import Charge, charge_of
from monitor.summary.comparisons import level_of
from monitor.summary.differences import Level
from monitor.summary.identity import Stamp, identity, plant_iso
from monitor.summary.record import Record, read
from monitor.summary.span import Span, Stretch
from monitor.summary.table import Summary, settled
from monitor.windows import MODES

NOTES = ("note", "shift note")


@dataclass(frozen=True, slots=True)
class _Job:
    """What all tables of one summary share."""

    unit: Unit
    problem: Problem
    figures: tuple[Figure, ...]  # as stored
    shown: tuple[Figure, ...]  # with raw routes beside selectivity, and the load
    rates: tuple[Figure, ...]  # what is counted in tonnes
    span: Span
    stretches: tuple[Stretch, ...]
    snapshot: Snapshot
    lines: tuple[Line, ...]


def summarise(folder: Path, unit: Unit, asked: Span, stamp: Stamp) -> Summary:
    """Make the summary of one unit over one span.

    Parameters
    ----------
    folder : Path
        The store.
    unit : Unit
        One reactor.
    asked : Span
    stamp : Stamp

    Returns
    -------
    Summary
        A draft: its revision is 0.

    Raises
    ------
    StoreError
        The store holds nothing of the span.
    UnitFileError
        Budget or guarantee names a figure that the readings do not give.
    """
    job = _job(folder, unit, asked)
    earlier = _earlier(job)
    left_out = exclusions.on_word(job.lines, asked)
    record = _record(job, asked, left_out)
    if record is None:
        raise StoreError(
            f"{folder}: holds no cells of {unit.key} in {asked.name}",
            remedy=f"Take exports of it in: outlet run --unit {unit.key}.toml --store {folder} EXPORT...",
        )
    made = tonnes.made_of(unit, asked, job.stretches, record, job.rates)
    days = results.by_day(unit, asked, record, job.shown)
    figures = pd.concat(
        [
            results.of_stretch(unit, asked, record, job.shown, stretch=stretch, days=days)
            for stretch in job.stretches
        ],
        ignore_index=True,
    )
    charge = _charges(job)
    episodes = store.episodes(folder, unit.key)
    until = wording.utc(int(record.cells.start[-1])) + unit.cell
    closed = witness.closing(desk.known(folder, unit.key), job.lines)
    alerts = witness.alerts(episodes, closed, asked, pd.Timestamp(until))
    tables = {
        "identity": identity(unit, asked, job.stretches, job.snapshot, stamp=stamp, until=until),
        "hours": _hours(job, record, made, figures, left_out),
        "tonnes": _tonnes(job, made),
        "figures": figures,
        "comparisons": _comparisons(job, record, earlier, charge),
        "expectation": _expectation(job, record),
        "catalyst": _catalyst(job, charge),
        "days": _days(job, made, days),
        "figures by day": _by_day(job, days),
        "balances": witness.balances(unit, asked, record, job.shown, days),
        "instruments": witness.instruments(unit, job.problem, record),
        "alerts": alerts,
        "alert counts": witness.counts(alerts),
        "exclusions": pd.concat([exclusions.by_condition(unit, record.cells), left_out], ignore_index=True),
        "words": _words(job),
        "definitions": terms.definitions(job.shown, made.decimals),
    }
    return Summary(
        unit=unit.key,
        unit_name=unit.name,
        span=asked.key,
        span_name=asked.name,
        decimals=made.decimals,
        revision=0,
        tables={name: settled(_in_plant_time(frame, unit.time_zone)) for name, frame in tables.items()},
    )


def compared(folder: Path, unit: Unit, asked: Span, other: Span) -> pd.DataFrame:
    """Compare a span with any other one, as its summary compares it with last month.

    Parameters
    ----------
    folder : Path
        The store.
    unit : Unit
        One reactor.
    asked, other : Span

    Returns
    -------
    DataFrame
        As the table `comparisons` of a summary; no rows where the store holds nothing of one of them.
    """
    job = _job(folder, unit, asked)
    levels = {}
    for one in (asked, other):
        record = _record(job, one, exclusions.on_word(job.lines, one))
        if record is not None:
            whole = Stretch(one.name, one.first_us, one.last_us, None)
            levels[one.name] = level_of(unit, record, job.shown, whole)
    here = {span.WHOLE: levels[asked.name]} if len(levels) == len({asked.name, other.name}) else {}
    there = {other.name: levels[other.name]} if here else {}
    table = comparisons.table(job.shown, here, {span.WHOLE: there})
    return settled(table[table["figure"].isin(_compared(job))])


def _job(folder: Path, unit: Unit, asked: Span) -> _Job:
    figures = figures_of(unit, amount_names(unit))
    return _Job(
        unit=unit,
        problem=problem_of(unit),
        figures=figures,
        shown=_shown(unit, figures),
        rates=tonnes.rates_of(unit, figures),
        span=asked,
        stretches=span.stretches_of(unit, asked),
        snapshot=Store(folder).snapshot(),
        lines=journal.lines(folder, unit=unit.key),
    )


def _shown(unit: Unit, figures: tuple[Figure, ...]) -> tuple[Figure, ...]:
    """Put the raw routes behind the selectivity that they belong to, and the load at the end."""
    at = next((place for place, one in enumerate(figures) if one.name == results.SELECTIVITY), -1) + 1
    load = tonnes.rates_of(unit, figures)[:1]
    return (*figures[:at], *results.routes_of(unit, figures), *figures[at:], *load)


def _record(job: _Job, asked: Span, left_out: pd.DataFrame) -> Record | None:
    edges = (wording.utc(asked.first_us), wording.utc(asked.last_us))
    return read(job.snapshot, job.unit, job.problem, edges, left_out)


def _charges(job: _Job) -> dict[str, Charge | None]:
    """Sum up the charge of each stretch up to its end."""
    return {stretch.name: _charge(job, stretch) for stretch in job.stretches}


def _charge(job: _Job, stretch: Stretch) -> Charge | None:
    """Sum up one charge; what people left out of it does not count as steady."""
    if stretch.charged is None:
        return None
    edges = (stretch.charged, wording.utc(stretch.last_us))
    first, last = (edge.astimezone(ZoneInfo(job.unit.time_zone)).date() for edge in edges)
    left_out = exclusions.on_word(job.lines, span.span_of(job.unit.time_zone, first, last))
    return charge_of(job.snapshot, job.unit, job.problem, job.shown, span=edges, left_out=left_out)


def _earlier(job: _Job) -> dict[str, Level]:
    """Give the figures of the spans before; each record is let go before the next is read."""
    earlier: dict[str, Level] = {}
    names = ("last month", "same month last year") if job.span.is_month else ("days before", "a year before")
    for name, other in zip(names, (span.before(job.span), span.year_before(job.span)), strict=True):
        there = _record(job, other, exclusions.on_word(job.lines, other))
        if there is not None:
            whole = Stretch(other.name, other.first_us, other.last_us, None)
            earlier[name] = level_of(job.unit, there, job.shown, whole)
    return earlier


def _comparisons(
    job: _Job, record: Record, earlier: Mapping[str, Level], charges: Mapping[str, Charge | None]
) -> pd.DataFrame:
    """Compare every stretch with what lies before it and with what was stated."""
    here = {stretch.name: level_of(job.unit, record, job.shown, stretch) for stretch in job.stretches}
    sources = record.amounts.systematic.shape[2]
    targets = comparisons.targets_of(job.unit, job.shown, sources)
    against = {}
    for stretch in job.stretches:
        charge = charges[stretch.name]
        since = {} if charge is None else {"the charge so far": charge.level}
        against[stretch.name] = {**earlier, **since, **targets}
    table = comparisons.table(job.shown, here, against)
    return table[table["figure"].isin(_compared(job))]


def _compared(job: _Job) -> list[str]:
    """Name what is compared: what has no better side is compared by nobody, but for the load."""
    return [one.name for one in job.shown if one.higher_is_better is not None or one in job.rates]


def _expectation(job: _Job, record: Record) -> pd.DataFrame:
    """Hold every stretch against the healthy period that the unit file names; no rows where it names none."""
    healthy = job.unit.healthy
    figures = [one for one in job.figures if one.name in shortfall.FIGURES]
    found = [pd.DataFrame(columns=list(shortfall.COLUMNS))]
    known = None
    if healthy is not None:
        span_of_it = (healthy.first, healthy.last)
        known = read(job.snapshot, job.unit, job.problem, span_of_it, _none(job), coarsely=True)
    if healthy is not None and known is not None:
        edges = (instant_us(healthy.first), instant_us(healthy.last))
        learnt = shortfall.hours_of(coarse_unit(job.unit), known, figures, *edges)
        for stretch in job.stretches:
            here = shortfall.hours_of(job.unit, record, figures, stretch.first_us, stretch.last_us)
            found.append(shortfall.shortfall(job.unit, figures, learnt, here, stretch))
    return pd.concat(found[1:] or found, ignore_index=True)


def _none(job: _Job) -> pd.DataFrame:
    """Nothing left out: what people say of other times does not move the healthy period."""
    return exclusions.on_word((), job.span)


def _hours(
    job: _Job, record: Record, made: tonnes.Made, figures: pd.DataFrame, left_out: pd.DataFrame
) -> pd.DataFrame:
    """List the hours of each stretch by condition, then what of the whole span was not seen or left out."""
    columns = ["calendar [h]", *(f"{name} [h]" for name in tonnes.CONDITIONS)]
    frames = [
        pd.DataFrame(
            {
                "stretch": stretch,
                "item": [one.removesuffix(" [h]") for one in columns],
                "hours": row[columns].to_numpy(),
            }
        )
        for stretch, row in made.stretches.iterrows()
    ]
    beside = {"left out by people": float(left_out["hours"].sum())}
    beside |= {
        f"{name} without a usable channel": hours
        for name, hours in witness.unavailable_h(job.unit, record).items()
    }
    beside["balance solved"] = float(record.solved.sum()) * job.unit.cell.total_seconds() / 3600
    frames.append(pd.DataFrame({"stretch": span.WHOLE, "item": list(beside), "hours": list(beside.values())}))
    table = pd.concat(frames, ignore_index=True)
    calendar = table[table["item"] == "calendar"].set_index("stretch")["hours"]
    table["of calendar [%]"] = 100 * table["hours"] / table["stretch"].map(calendar)
    return table


def _tonnes(job: _Job, made: tonnes.Made) -> pd.DataFrame:
    """List tonnes by stretch and flow, with what was not seen."""
    running = made.stretches["calendar [h]"] - made.stretches["down [h]"]
    pieces = []
    for stretch in made.stretches.index:
        seen = made.seen_h.loc[stretch, list(made.flows)].to_numpy(float)
        total = made.stretches.loc[stretch, list(made.flows)].to_numpy(float)
        rate = total / np.where(seen > 0, seen, np.nan)
        pieces.append(
            pd.DataFrame(
                {
                    "stretch": stretch,
                    "flow": [name.removesuffix(" [t]") for name in made.flows],
                    "tonnes": total,
                    "±": made.half_width.loc[stretch, list(made.flows)].to_numpy(float),
                    "seen in [h]": seen,
                    "not seen in [h]": running[stretch] - seen,
                    "at the mean rate": rate * running[stretch],
                }
            )
        )
    return pd.concat(pieces, ignore_index=True).round({"at the mean rate": made.decimals})


def _catalyst(job: _Job, charges: Mapping[str, Charge | None]) -> pd.DataFrame:
    """Tell age, time on stream and tonnes of each charge up to the end of its stretch."""
    zone = job.unit.time_zone
    stretches = job.stretches if len(job.stretches) == 1 else job.stretches[:-1]
    known = [one for one in (charges[stretch.name] for stretch in stretches) if one is not None]
    return pd.DataFrame(
        {
            "charge": [span.charge_name(one.charged, zone) for one in known],
            "charged": [pd.Timestamp(one.charged).tz_convert("UTC") for one in known],
            "age [d]": [one.age_days for one in known],
            "record from": [one.record_from for one in known],
            "on stream [h]": [one.on_stream_h for one in known],
            f"{job.unit.wanted} made [t]": [one.made_t for one in known],
        }
    )


def _days(job: _Job, made: tonnes.Made, days: pd.DataFrame) -> pd.DataFrame:
    """List hours, tonnes and load by day."""
    frame = made.days.copy()
    frame.insert(0, "day", [f"{day}" for day in job.span.days])
    if job.rates:
        load = job.rates[0].name
        frame[f"{load} [t/h]"] = days[load, "as operated", "value"].to_numpy()
    return frame


def _by_day(job: _Job, days: pd.DataFrame) -> pd.DataFrame:
    """List every figure by day: value and half-width in both modes."""
    columns: dict[str, object] = {"day": [f"{day}" for day in job.span.days]}
    for mode in MODES:
        columns[f"coverage | {mode} | %"] = 100 * days[job.shown[0].name, mode, "coverage"].to_numpy()
    for one in job.shown:
        for mode in MODES:
            columns[f"{one.name} | {mode} | {one.unit}"] = days[one.name, mode, "value"].to_numpy()
            columns[f"{one.name} | {mode} | ±"] = days[one.name, mode, "half_width"].to_numpy()
    return pd.DataFrame(columns)


def _words(job: _Job) -> pd.DataFrame:
    """List what people know of the span: events of the unit file, notes of the journal."""
    low, high = wording.utc(job.span.first_us), wording.utc(job.span.last_us)
    rows = [
        (pd.Timestamp(one.at).tz_convert("UTC"), one.kind, one.instrument or "", one.name, "unit file", 0)
        for one in job.unit.events
        if low <= one.at < high
    ]
    for line in job.lines:
        at = datetime.fromisoformat(line.written).astimezone(UTC)
        if line.act in NOTES and (low <= at < high or line.subject == job.span.key):
            rows.append((pd.Timestamp(at), line.act, line.subject, line.note, line.who, line.number))
    columns = ["when", "kind", "about", "text", "by", "number"]
    frame = pd.DataFrame(rows, columns=columns).astype({"when": "datetime64[us, UTC]", "number": int})
    return frame.sort_values(["when", "number"], kind="stable", ignore_index=True)


def _in_plant_time(frame: pd.DataFrame, zone: str) -> pd.DataFrame:
    """Write instants in plant time with their offset, which sorts and has one meaning everywhere."""
    columns = {
        str(name): [plant_iso(one, zone) for one in column]
        if isinstance(column.dtype, pd.DatetimeTZDtype)
        else column.to_numpy()
        for name, column in frame.items()
    }
    return pd.DataFrame(columns)
