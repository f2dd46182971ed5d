"""Commands that bring exports in and show what is stored: demo, run, follow, page."""

from __future__ import annotations

import json
import os
import socket
import sys
from collections.abc import Sequence
from dataclasses import asdict
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import TYPE_CHECKING

import click

from ingest.errors import OutletError
from monitor.commands.shared import (
    FINE,
    STOPPED_WORDS,
    YOURS,
    folder_path,
    json_option,
    port_option,
    say,
    seconds,
    store_option,
    units_option,
)
from monitor.page.launch import command

if TYPE_CHECKING:
    from ingest.unit import Unit
    from monitor.run import PassResult

DEMO_DAYS = 60


@click.command()
@click.option(
    "--folder", type=folder_path, default=Path("demo-plant"), show_default=True, help="Where to put it."
)
@click.option(
    "--days",
    type=click.IntRange(1, DEMO_DAYS),
    default=DEMO_DAYS,
    show_default=True,
    help="Days of exports.",
)
@click.option("--no-page", is_flag=True, help="End after the pass.")
@port_option
@json_option
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


@click.command()
@units_option
@store_option
@json_option
@click.argument("exports", type=click.Path(path_type=Path), nargs=-1, required=True)
def run(unit_files: Sequence[Path], store: Path, exports: Sequence[Path], as_json: bool) -> int:
    """Take EXPORTS (files or folders) in, then bring figures and episodes up to date."""
    return _take_in(unit_files, store, exports, as_json)


@click.command()
@units_option
@store_option
@click.option(
    "--every", type=seconds, default=5, show_default=True, help="Seconds from one look to the next."
)
@click.option(
    "--settle", type=seconds, default=10, show_default=True, help="Seconds that a file must be at rest."
)
@click.option("--json", "as_json", is_flag=True, help="Print one JSON object a line for each pass.")
@click.argument("folders", metavar="FOLDER...", type=folder_path, nargs=-1, required=True)
def follow(
    unit_files: Sequence[Path],
    store: Path,
    folders: Sequence[Path],
    *,
    every: float,
    settle: float,
    as_json: bool,
) -> int:
    """Stay, and take in what arrives in each FOLDER. SIGTERM (exit code 0) or Ctrl+C ends it.

    A line a pass goes to standard output, what went wrong to standard error, once. A pass that is
    interrupted leaves no trace; what was taken in is known from the store, however this ended.
    """
    from monitor.follow import Follower, Stop, keep_looking
    from monitor.tellexports import in_one_line

    def tell(result: PassResult, zone: str) -> None:
        line = json.dumps(asdict(result), ensure_ascii=False, default=str)
        click.echo(line if as_json else in_one_line(result, datetime.now(UTC), zone))

    def warn(words: str) -> None:
        click.echo(words, err=True)

    with Stop() as stop:
        try:
            follower = Follower(
                unit_files,
                store,
                folders,
                settle=timedelta(seconds=settle),
                tell=tell,
                warn=warn,
                check=stop.check,
            )
            keep_looking(follower, every=timedelta(seconds=every))
        except KeyboardInterrupt:
            if not stop.is_asked:
                raise
            warn(STOPPED_WORDS)
    return FINE


@click.command()
@units_option
@store_option
@port_option
def page(unit_files: Sequence[Path], store: Path, port: int) -> int:
    """Show what is stored in the browser, to this computer alone. Ctrl+C ends it."""
    _must_be_free(port)
    return _serve(store, unit_files, port)


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
    say(asdict(result), passed(result), as_json=as_json)
    for one in result.set_aside:
        click.echo(one.words, err=True)
    _notify(units, store)
    return YOURS if result.set_aside else FINE


def _notify(units: Sequence[Unit], store: Path) -> None:
    """Send the notices that are due; what does not arrive is told, and no fault of the pass."""
    from monitor.posting import post
    from monitor.tellnotices import troubles

    for words in troubles(post(units, store, datetime.now(UTC))):
        click.echo(words, err=True)


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
