"""The command that tries limits on the past."""

from __future__ import annotations

from dataclasses import replace
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from monitor.commands.shared import day, json_option, say, store_option, unit_option

if TYPE_CHECKING:
    from ingest.unit import Unit, Watch

USUAL = timedelta(days=365)


@click.command("try-limits")
@unit_option
@store_option
@click.option("--watch", "name", help="A watch of the unit file to begin with.")
@click.option("--figure", help="Name of the figure.")
@click.option("--window", help="One of the windows of the unit, as 8h.")
@click.option("--low", type=float, help="Limit below which an episode begins.")
@click.option("--high", type=float, help="Limit above which an episode begins.")
@click.option("--deadband", type=click.FloatRange(0), help="How far back inside. [default: 0]")
@click.option("--on-delay", help="How long the limit has to be crossed, as 1h. [default: 0 s]")
@click.option("--off-delay", help="How long the figure has to be back, as 2h. [default: 0 s]")
@click.option("--from", "first", type=day, help="First day, plant time. [default: a year before the end]")
@click.option("--to", "last", type=day, help="Last day. [default: the end of the record]")
@json_option
def try_limits(unit_file: Path, store: Path, *, as_json: bool, **asked: Any) -> None:
    """Try limits on the past: what they had caught, how late, and how many false alerts. Changes nothing."""
    from ingest.unitfile import load
    from monitor.store import days
    from monitor.telltrials import as_table, lines
    from monitor.tryout import trial, whole_span

    unit = load(unit_file)
    watch = _watch(unit, asked)
    first, last = asked["first"], asked["last"]
    whole = whole_span(store, unit, USUAL)
    end = days(store, unit, None, last.date())[1] if last else whole[1]
    begin = days(store, unit, first.date(), None)[0] if first else whole[0]
    found, points = trial(store, unit, watch, (begin, end), now=datetime.now(UTC))
    say(as_table(found, points), lines(found, points, unit), as_json=as_json)


def _watch(unit: Unit, asked: dict[str, Any]) -> Watch:
    """The watch that is named, with what else is asked for in its place, or a new one."""
    from ingest.quantities import duration
    from ingest.unit import Watch

    given = {key: asked[key] for key in ("figure", "low", "high", "deadband") if asked[key] is not None}
    given |= {
        key: duration(asked[key]) for key in ("window", "on_delay", "off_delay") if asked[key] is not None
    }
    if asked["name"]:
        named = {one.name: one for one in unit.watches}
        if asked["name"] not in named:
            raise click.UsageError(f"no watch is called {asked['name']!r}; there are {', '.join(named)}")
        return replace(named[asked["name"]], **given)
    if "figure" not in given or "window" not in given:
        raise click.UsageError("say --figure and --window, or a --watch of the unit file")
    usual = Watch(
        name="", figure="", window=timedelta(0), low=None, high=None, priority="medium", deadband=0.0,
        on_delay=timedelta(0), off_delay=timedelta(0), steady=True,
    )  # fmt: skip
    return replace(usual, **given)
