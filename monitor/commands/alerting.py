"""Commands about alerts: list them, look at one, and say what is done about it."""

from __future__ import annotations

import getpass
import json
from collections.abc import Callable, Sequence
from dataclasses import asdict
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from monitor.alerts import CAUSES, LONGEST_SHELF
from monitor.commands.shared import json_option, say, store_option, unit_option, units_option

if TYPE_CHECKING:
    from ingest.journal import Line

LONGEST_H = LONGEST_SHELF / timedelta(hours=1)

_id = click.argument("alert", metavar="ID")


def _acting(command: Callable[..., Any]) -> Callable[..., Any]:
    """Give a command what every act needs: the alert, who, and a note."""
    for option in (
        json_option,
        click.option("--note", default="", help="What you have to say."),
        click.option("--who", default=getpass.getuser, help="Your name. [default: the login name]"),
        store_option,
        _id,
    ):
        command = option(command)
    return command


def _tell(line: Line, as_json: bool) -> None:
    """Print the line of the journal that was written."""
    from monitor.tellalerts import wrote

    say(asdict(line), wrote(line), as_json=as_json)


@click.group()
def alerts() -> None:
    """Alerts: which are open, worst first, and what is done about them."""


@alerts.command("list")
@units_option
@store_option
@click.option("--all", "every", is_flag=True, help="Those that are back to normal as well.")
@json_option
def list_(unit_files: Sequence[Path], store: Path, every: bool, as_json: bool) -> None:
    """List the open alerts, worst first; those of one cause stand together."""
    from ingest.unitfile import load
    from monitor.alerthealth import health
    from monitor.alerts import grouped
    from monitor.desk import read
    from monitor.store import edges
    from monitor.tellalerts import as_table, healthy, listed

    now, told, units = datetime.now(UTC), [], {}
    for unit in map(load, unit_files):
        found = read(store, unit.key, now)
        shown = [(alert, state) for alert, state in found if every or state.open]
        known = edges(store, unit.key)
        counts = health(found, min(now, known[1] + unit.cell) if known else now)
        units[unit.key] = {"alerts": [as_table(*one) for one in shown], "health": asdict(counts)}
        told += [f"{unit.name} [{unit.key}]", *listed(grouped(shown), unit), *healthy(counts)]
    say({"units": units}, told, as_json=as_json)


@alerts.command()
@_id
@unit_option
@store_option
@json_option
def show(alert: str, unit_file: Path, store: Path, as_json: bool) -> None:
    """Show all about one alert: condition, verdict, what late data changed, journal."""
    from ingest.unitfile import load
    from monitor.desk import find, history
    from monitor.dossier import verdicts
    from monitor.store import episodes
    from monitor.tellalerts import as_table, told
    from monitor.tellverdict import lines
    from monitor.verdict import as_text

    unit = load(unit_file)
    one, state = find(store, alert, datetime.now(UTC))
    verdict = verdicts([(one, state)], episodes(store, one.unit)).get(one.id)
    said = [
        *told(one, state, history(store, one), unit),
        *(lines(verdict, unit) if verdict else ()),
    ]
    table = {**as_table(one, state), "verdict": json.loads(as_text(verdict)) if verdict else None}
    say(table, said, as_json=as_json)


@alerts.command()
@_acting
def take(alert: str, store: Path, who: str, note: str, as_json: bool) -> None:
    """Take an alert: say that you look after it."""
    from monitor import desk

    _tell(desk.take(store, alert, who, note=note), as_json)


@alerts.command()
@_acting
@click.option("--reason", required=True, help="Why.")
@click.option(
    "--hours",
    type=click.FloatRange(0, LONGEST_H, min_open=True),
    default=LONGEST_H,
    show_default=True,
    help="How long; then it comes back by itself.",
)
def shelve(alert: str, store: Path, who: str, *, note: str, as_json: bool, reason: str, hours: float) -> None:
    """Shelve an alert for some hours, with the reason."""
    from monitor import desk

    words = f"{reason} {note}".strip()
    _tell(desk.shelve(store, alert, who, reason=words, length=timedelta(hours=hours)), as_json)


@alerts.command()
@_acting
def unshelve(alert: str, store: Path, who: str, note: str, as_json: bool) -> None:
    """Bring a shelved alert back before its time."""
    from monitor import desk

    _tell(desk.unshelve(store, alert, who, note=note), as_json)


@alerts.command()
@_acting
def note(alert: str, store: Path, who: str, note: str, as_json: bool) -> None:
    """Write a note to an alert."""
    from monitor import desk

    _tell(desk.add_note(store, alert, who, note), as_json)


@alerts.command()
@_acting
@click.option("--cause", type=click.Choice(CAUSES), required=True, help="What it was.")
def close(alert: str, store: Path, who: str, *, note: str, as_json: bool, cause: str) -> None:
    """Close an alert with the cause that was found."""
    from monitor import desk

    _tell(desk.close(store, alert, who, cause=cause, note=note), as_json)


@alerts.command()
@unit_option
@store_option
@click.option("--watch", required=True, help="Name of the watch.")
@click.option("--reason", default="", help="Why; needed to take it out of service.")
@click.option("--back", is_flag=True, help="Back into service.")
@click.option("--who", default=getpass.getuser, help="Your name. [default: the login name]")
@json_option
def rest(
    unit_file: Path, store: Path, *, watch: str, reason: str, back: bool, who: str, as_json: bool
) -> None:
    """Take a watch out of service, with the reason, or bring it back."""
    from ingest.unitfile import load
    from monitor import desk

    unit = load(unit_file)
    names = [one.name for one in unit.watches]
    if watch not in names:
        raise click.UsageError(f"no watch is called {watch!r}; there are {', '.join(map(repr, names))}")
    if back:
        line = desk.resume(store, unit.key, watch, who)
    else:
        line = desk.rest(store, unit.key, watch, who, reason=reason)
    _tell(line, as_json)
