"""The commands: thin, quick to start, and the one place where an error becomes an exit code.

Libraries that take long to import are imported inside the command that needs them.
"""

from __future__ import annotations

import json
import os
import socket
import sys
from collections.abc import Iterable, Sequence
from dataclasses import asdict
from datetime import datetime, timedelta
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from ingest.errors import ExportError, OutletError
from monitor.page.launch import DEFAULT_PORT, command

if TYPE_CHECKING:
    from ingest.unit import Unit

Span = tuple[datetime, datetime]

# Matrices here are small: more threads of the linear algebra cost twice the processor time and no less time.
os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

# Exit codes; 1 is Python's own for a fault of ours, 130 the shell's for Ctrl+C.
FINE, YOURS, STOPPED = 0, 2, 130
DEMO_DAYS = 60
MOST_CELLS = 20_000  # that suspects looks at in one go: 180 MB of residuals

_file = click.Path(dir_okay=False, path_type=Path)
_folder = click.Path(file_okay=False, path_type=Path)
_units = click.option(
    "--unit",
    "unit_files",
    type=_file,
    multiple=True,
    required=True,
    help="Unit file; give it again for more units.",
)
_store = click.option(
    "--store", type=_folder, default=Path("outlet-store"), show_default=True, help="Folder of the store."
)
_port = click.option(
    "--port",
    type=click.IntRange(1024, 65535),
    default=DEFAULT_PORT,
    show_default=True,
    help="Port on 127.0.0.1.",
)
_day = click.DateTime(formats=["%Y-%m-%d"])
_json = click.option("--json", "as_json", is_flag=True, help="Print one JSON object.")


def main() -> None:
    """Run one command: exit 0 when fine, 2 when something is the user's to mend, 1 when we are at fault."""
    try:
        code = outlet.main(prog_name="outlet", standalone_mode=False)
    except OutletError as error:
        click.echo(str(error), err=True)
        code = YOURS
    except click.ClickException as error:
        click.echo(_two_lines(error), err=True)
        code = YOURS
    except (click.Abort, KeyboardInterrupt):
        click.echo("Stopped. The store holds the last pass that was finished.", err=True)
        code = STOPPED
    sys.exit(code or FINE)


def _two_lines(error: click.ClickException) -> str:
    """Tell a mistake on the command line as all other errors are told."""
    context = getattr(error, "ctx", None)
    path = context.command_path if context else "outlet"
    return f"{path}: {error.format_message()}\n  See '{path} --help'."


def _version(context: click.Context, _: click.Parameter, asked: bool) -> None:
    """Print the version, installed or not, and end."""
    if asked:
        from ingest.database import program_version

        click.echo(f"outlet {program_version()}")
        context.exit()


@click.group(context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 100})
@click.option(
    "--version", is_flag=True, is_eager=True, expose_value=False, callback=_version, help="Show it."
)
def outlet() -> None:
    """Conversion, selectivity and yield of a reactor, reconciled from historian exports.

    Advisory only: no protective function, no basis for interlock or trip settings.
    """


@outlet.command()
@click.option(
    "--folder", type=_folder, default=Path("demo-plant"), show_default=True, help="Where to put it."
)
@click.option(
    "--days",
    type=click.IntRange(1, DEMO_DAYS),
    default=DEMO_DAYS,
    show_default=True,
    help="Days of exports.",
)
@click.option("--no-page", is_flag=True, help="End after the pass.")
@_port
@_json
def demo(folder: Path, days: int, no_page: bool, port: int, as_json: bool) -> int:
    """Make the invented plant, take its exports in and show the page."""
    from demo_data import exports

    if not no_page:
        _must_be_free(port)
    click.echo(f"Making {days} days of an invented plant in {folder} ...", err=True)
    try:
        made = exports.make(folder, days=days)
    except OSError as fault:
        raise OutletError(f"{folder}: {fault.strerror}", remedy="Give another --folder.") from fault
    # What was written a moment ago is whole: nothing else writes into this folder.
    code = _take_in([exports.UNIT_FILE], folder / "store", made.exports, as_json, settle=timedelta(0))
    return code if no_page else _serve(folder / "store", [exports.UNIT_FILE], port)


@outlet.command()
@click.argument("file", type=_file)
@click.option("--store", type=_folder, help="Folder of a store; tells the usual readings.")
@_json
def check(file: Path, store: Path | None, as_json: bool) -> None:
    """Judge a unit FILE: all its faults, or what its instruments let you see and check, and how well."""
    from ingest.unitfile import load
    from monitor.judge import as_table, judge
    from monitor.store import last_running
    from monitor.telling import judged

    unit = load(file)
    found = judge(unit, None if store is None else last_running(store, unit, timedelta(days=7)))
    _print(as_table(found), judged(found), as_json=as_json)


@outlet.command()
@click.argument("export", type=_file)
@click.option("--unit", "unit_file", type=_file, required=True, help="Unit file.")
@_json
def describe(export: Path, unit_file: Path, as_json: bool) -> None:
    """Show how an EXPORT would be read: dialect, first rows, account. Nothing is stored."""
    from ingest.exports import describe as described
    from ingest.unitfile import load
    from monitor.telling import described as told

    unit = load(unit_file)
    tags = frozenset(one.tag for one in unit.instruments if one.tag is not None)
    if not export.is_file():
        raise ExportError(f"{export}: there is no such file", remedy="Check the name.")
    found = described(export, rules=unit.exports, wanted=tags, time_zone=unit.time_zone)
    _print(asdict(found), told(found, unit), as_json=as_json)


@outlet.command()
@_units
@_store
@_json
@click.argument("exports", type=click.Path(path_type=Path), nargs=-1, required=True)
def run(unit_files: Sequence[Path], store: Path, exports: Sequence[Path], as_json: bool) -> int:
    """Take EXPORTS (files or folders) in, then bring figures and episodes up to date."""
    return _take_in(unit_files, store, exports, as_json)


@outlet.command()
@_units
@_store
@_port
def page(unit_files: Sequence[Path], store: Path, port: int) -> int:
    """Show what is stored in the browser, to this computer alone. Ctrl+C ends it."""
    _must_be_free(port)
    return _serve(store, unit_files, port)


@outlet.command()
@click.option("--unit", "unit_file", type=_file, required=True, help="Unit file.")
@_store
@click.option(
    "--days", type=click.IntRange(1, 366), default=7, show_default=True, help="The last days to look at."
)
@_json
def lag(unit_file: Path, store: Path, days: int, as_json: bool) -> int:
    """Tell how late each analyzer is by the plant's own movement. Nothing is changed."""
    from ingest.unitfile import load
    from monitor.delays import as_table, delays
    from monitor.telling import delayed

    found = delays(store, load(unit_file), days)
    _print(as_table(found), delayed(found), as_json=as_json)
    return YOURS if any(one.is_contradicted for one in found.analyzers) else FINE


@outlet.command()
@click.option("--unit", "unit_file", type=_file, required=True, help="Unit file.")
@_store
@click.option("--from", "first", type=_day, help="First day, plant time. [default: a week before the end]")
@click.option("--to", "last", type=_day, help="Last day. [default: the end of the record]")
@click.option("--baseline-from", "healthy_first", type=_day, help="First day of a time when all was well.")
@click.option("--baseline-to", "healthy_last", type=_day, help="Last day of it.")
@_json
def suspects(unit_file: Path, store: Path, as_json: bool, **days: datetime | None) -> int:
    """Tell whether the balance fits, and if not, which readings are suspected and what to check first."""
    from ingest.unitfile import load
    from monitor.store import cells
    from monitor.suspicion import as_table, report
    from monitor.telling import suspected

    unit = load(unit_file)
    span, healthy = _spans(store, unit, **days)
    found = report(unit, cells(store, unit, span), None if healthy is None else cells(store, unit, healthy))
    _print(as_table(found), suspected(found), as_json=as_json)
    return YOURS if found.findings else FINE


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


@outlet.command()
@_store
@_json
def verify(store: Path, as_json: bool) -> int:
    """Read the whole store and compare it with what was written."""
    from ingest.ledger import Store

    findings = Store(store).verify()
    told = [f"{store}/{one.file}: {one.what}\n  {one.remedy}" for one in findings]
    _print(
        {"store": str(store), "findings": [asdict(one) for one in findings]},
        told or [f"{store}: every part is as it was written"],
        as_json=as_json,
    )
    return YOURS if findings else FINE


def _take_in(
    unit_files: Sequence[Path], store: Path, exports: Sequence[Path], as_json: bool, **settings: timedelta
) -> int:
    """Run one pass and tell what it did; an export that was set aside makes the exit code 2."""
    from ingest.unitfile import load
    from monitor.progress import Bar
    from monitor.run import run_pass
    from monitor.telling import passed

    units = [load(file) for file in unit_files]
    with Bar() as bar:
        result = run_pass(units, store, exports, progress=bar, **settings)
    _print(asdict(result), passed(result), as_json=as_json)
    for one in result.set_aside:
        click.echo(one.words, err=True)
    return YOURS if result.set_aside else FINE


def _print(data: dict[str, Any], told: Iterable[str], *, as_json: bool) -> None:
    """Print one JSON object for programs, or lines for people."""
    if as_json:
        click.echo(json.dumps(data, indent=1, ensure_ascii=False, default=str))
    else:
        for line in told:
            click.echo(line)


def _must_be_free(port: int) -> None:
    """Refuse a port that another program listens on, before any work is done for its sake."""
    with socket.socket() as probe:
        probe.setsockopt(socket.SOL_SOCKET, socket.SO_REUSEADDR, 1)
        try:
            probe.bind(("127.0.0.1", port))
        except OSError as fault:
            raise OutletError(
                f"port {port}: {fault.strerror}",
                remedy="End the program that uses it, or give another --port.",
            ) from fault


def _serve(store: Path, unit_files: Sequence[Path], port: int) -> int:
    """Become the page's server; comes back only where a process cannot be replaced."""
    from ingest.unitfile import load

    for file in unit_files:
        load(file)
    click.echo(f"The page is on http://127.0.0.1:{port} (this computer only). Ctrl+C ends it.", err=True)
    words = command(store, unit_files, port)
    sys.stdout.flush()
    os.execv(words[0], words)  # noqa: S606 - the words are our own, no shell is wanted
