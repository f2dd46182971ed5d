"""Commands that answer questions: check, describe, lag, suspects, ageing."""

from __future__ import annotations

from dataclasses import asdict
from datetime import datetime, timedelta
from pathlib import Path
from typing import TYPE_CHECKING

import click

from ingest.errors import ExportError
from monitor.commands.shared import (
    FINE,
    YOURS,
    day,
    file_path,
    folder_path,
    json_option,
    say,
    store_option,
    unit_option,
)

if TYPE_CHECKING:
    from ingest.unit import Unit

Span = tuple[datetime, datetime]

MOST_CELLS = 20_000  # that suspects looks at in one go: 180 MB of residuals


@click.command()
@click.argument("file", type=file_path)
@click.option("--store", type=folder_path, help="Folder of a store; tells the usual readings.")
@json_option
def check(file: Path, store: Path | None, as_json: bool) -> None:
    """Judge a unit FILE: all its faults, or what its instruments let you see and check, and how well."""
    from ingest.unitfile import load
    from monitor.judge import as_table, judge
    from monitor.store import last_running
    from monitor.telling import judged

    unit = load(file)
    found = judge(unit, None if store is None else last_running(store, unit, timedelta(days=7)))
    say(as_table(found), judged(found), as_json=as_json)


@click.command()
@click.argument("export", type=file_path)
@unit_option
@json_option
def describe(export: Path, unit_file: Path, as_json: bool) -> None:
    """Show how an EXPORT would be read: dialect, first rows, account. Nothing is stored."""
    from ingest.exports import describe as described
    from ingest.measures import stated_units
    from ingest.unitfile import load
    from monitor.telling import described as told

    unit = load(unit_file)
    tags = frozenset(one.tag for one in unit.instruments if one.tag is not None)
    if not export.is_file():
        raise ExportError(f"{export}: there is no such file", remedy="Check the name.")
    units = stated_units([unit])
    found = described(export, rules=unit.exports, wanted=tags, time_zone=unit.time_zone, units=units)
    say(asdict(found), told(found, unit), as_json=as_json)


@click.command()
@unit_option
@store_option
@click.option(
    "--days", type=click.IntRange(1, 366), default=7, show_default=True, help="The last days to look at."
)
@json_option
def lag(unit_file: Path, store: Path, days: int, as_json: bool) -> int:
    """Tell how late each analyzer is by the plant's own movement. Nothing is changed."""
    from ingest.unitfile import load
    from monitor.delays import as_table, delays
    from monitor.telling import delayed

    found = delays(store, load(unit_file), days)
    say(as_table(found), delayed(found), as_json=as_json)
    return YOURS if any(one.is_contradicted for one in found.analyzers) else FINE


@click.command()
@unit_option
@store_option
@click.option("--from", "first", type=day, help="First day, plant time. [default: a week before the end]")
@click.option("--to", "last", type=day, help="Last day. [default: the end of the record]")
@click.option("--baseline-from", "healthy_first", type=day, help="First day of a time when all was well.")
@click.option("--baseline-to", "healthy_last", type=day, help="Last day of it.")
@json_option
def suspects(unit_file: Path, store: Path, as_json: bool, **days: datetime | None) -> int:
    """Tell whether the balance fits, and if not, which readings are suspected and what to check first."""
    from ingest.unitfile import load
    from monitor.store import cells
    from monitor.suspicion import as_table, report
    from monitor.telling import suspected

    unit = load(unit_file)
    span, healthy = _spans(store, unit, **days)
    found = report(unit, cells(store, unit, span), None if healthy is None else cells(store, unit, healthy))
    say(as_table(found), suspected(found), as_json=as_json)
    return YOURS if found.findings else FINE


@click.command()
@unit_option
@store_option
@json_option
def ageing(unit_file: Path, store: Path, as_json: bool) -> None:
    """Tell how fast the figures of drift watches age, and by which dates their limits are reached."""
    from ingest.unitfile import load
    from monitor.aged import aged, as_table
    from monitor.tellageing import told

    found = aged(store, load(unit_file))
    say(as_table(found), told(found), as_json=as_json)


def _spans(
    store: Path,
    unit: Unit,
    *,
    first: datetime | None,
    last: datetime | None,
    healthy_first: datetime | None,
    healthy_last: datetime | None,
) -> tuple[Span, Span | None]:
    """Turn the days that were asked for into spans of time."""
    from monitor.store import days

    if (healthy_first is None) != (healthy_last is None):
        raise click.UsageError("--baseline-from and --baseline-to go together")
    span = days(store, unit, first, last)
    healthy = days(store, unit, healthy_first, healthy_last) if healthy_first and healthy_last else None
    for asked in (span, healthy):
        if asked and not asked[0] < asked[1]:
            raise click.UsageError(f"the first day {asked[0]:%F} lies after the last")
        if asked and asked[1] - asked[0] > MOST_CELLS * unit.cell:
            raise click.UsageError(f"more than {MOST_CELLS * unit.cell // timedelta(days=1)} days at once")
    return span, healthy
