"""Commands for month-end: month, exclude."""

from __future__ import annotations

import getpass
from collections.abc import Sequence
from datetime import date, datetime
from pathlib import Path
from typing import Any

import click

from monitor.commands.shared import (
    FINE,
    YOURS,
    day,
    folder_path,
    json_option,
    say,
    store_option,
    unit_option,
    units_option,
)

FORMS = ("xlsx", "html", "csv", "parquet")
CAUSES = ("test", "meter", "data", "feed", "planned", "other")
moment = click.DateTime(formats=["%Y-%m-%d %H:%M", "%Y-%m-%dT%H:%M", "%Y-%m-%d"])


@click.command()
@click.argument("month", type=click.DateTime(formats=["%Y-%m"]), required=False, metavar="YYYY-MM")
@units_option
@store_option
@click.option("--from", "first", type=day, help="First day, plant time, instead of a month.")
@click.option("--to", "last", type=day, help="Last day.")
@click.option(
    "--out", type=folder_path, default=Path(), show_default="this folder", help="Folder to write to."
)
@click.option(
    "--form",
    "forms",
    type=click.Choice(FORMS),
    multiple=True,
    default=FORMS,
    show_default="all",
    help="What to write.",
)
@click.option("--by", "prepared_by", help="Who prepares it. [default: the user of this computer]")
@click.option("--draft", is_flag=True, help="Look at it: nothing is kept in the store.")
@json_option
def month(
    month: datetime | None,
    unit_files: Sequence[Path],
    store: Path,
    out: Path,
    as_json: bool,
    *,
    forms: Sequence[str],
    draft: bool,
    **asked: Any,
) -> int:
    """Write the performance summary of a month (or of some days), and keep it as a numbered revision."""
    from monitor.progress import Bar
    from monitor.summary.batch import Order, all_of
    from monitor.tellsummary import as_table, made

    days = _days(month, asked["first"], asked["last"])
    order = Order(
        store=store,
        out=out,
        forms=tuple(forms),
        prepared_by=asked["prepared_by"] or getpass.getuser(),
        is_draft=draft,
        month=None if month is None else (month.year, month.month),
        days=days,
    )
    with Bar() as bar:
        done = all_of(unit_files, order, bar)
    say(as_table(done), made(done), as_json=as_json)
    faults = [one.fault for one in done if one.fault]
    for fault in faults:
        click.echo(fault, err=True)
    return YOURS if faults else FINE


def _days(month: datetime | None, first: datetime | None, last: datetime | None) -> tuple[date, date] | None:
    """Check that one span of time was asked for."""
    if (first is None) != (last is None):
        raise click.UsageError("--from and --to go together")
    if (month is None) == (first is None):
        raise click.UsageError("write a month such as 2026-04, or --from and --to")
    if first is None or last is None:
        return None
    if last < first:
        raise click.UsageError(f"the first day {first:%F} lies after the last")
    return first.date(), last.date()


@click.command()
@unit_option
@store_option
@click.option("--from", "first", type=moment, help="Where it begins, plant time.")
@click.option("--to", "last", type=moment, help="Where it ends; that instant counts again.")
@click.option("--cause", type=click.Choice(CAUSES), help="Why.")
@click.option("--note", default="", help="In words.")
@click.option("--by", "who", help="Who says so. [default: the user of this computer]")
@click.option("--back", type=int, help="Number of an exclusion to take back, instead of a new one.")
@json_option
def exclude(unit_file: Path, store: Path, as_json: bool, *, note: str, back: int | None, **told: Any) -> None:
    """Leave a span out of the steady figures of summaries. Tonnes and figures as operated keep it."""
    from dataclasses import asdict

    from ingest import journal
    from ingest.unitfile import load
    from monitor.summary.exclusions import EXCLUDE, INCLUDE, detail_of

    unit, who = load(unit_file), told["who"] or getpass.getuser()
    first, last, cause = (told[key] for key in ("first", "last", "cause"))
    if back is not None:
        line = journal.write(store, who=who, act=INCLUDE, unit=unit.key, subject=str(back), note=note)
    elif first is None or last is None or cause is None:
        raise click.UsageError("write --from, --to and --cause, or --back")
    else:
        detail = detail_of(_plant(first, unit.time_zone), _plant(last, unit.time_zone), cause)
        line = journal.write(
            store, who=who, act=EXCLUDE, unit=unit.key, subject=detail["from"], note=note, detail=detail
        )
    say(asdict(line), [f"{unit.key}: {line.act}, number {line.number} of the journal"], as_json=as_json)


def _plant(local: datetime, zone: str) -> datetime:
    """Take what was typed for plant time."""
    from zoneinfo import ZoneInfo

    return local.replace(tzinfo=ZoneInfo(zone))
