"""Commands about the store itself: exports, verify."""

from __future__ import annotations

from dataclasses import asdict
from pathlib import Path

import click

from monitor.commands.shared import (
    FINE,
    YOURS,
    json_option,
    say,
    store_option,
)


@click.command()
@store_option
@click.option("--name", default="", help="Only exports whose name holds these words.")
@json_option
@click.argument("which", metavar="[NUMBER|NAME]", required=False)
def exports(store: Path, name: str, which: str | None, as_json: bool) -> None:
    """List the exports that were taken in or set aside, newest first, or tell the whole account of one."""
    from ingest.ledger import Store
    from monitor.deliveries import matching, named, table
    from monitor.tellexports import as_rows, as_table, listed, told

    entries = Store(store).exports()
    if which is None:
        frame = matching(table(entries), name)
        say({"exports": as_rows(frame)}, listed(frame), as_json=as_json)
        return
    found = named(entries, which)
    names = {one.number: one.name for one in entries}
    lines = (line for one in found for line in told(one, names))
    say({"exports": [as_table(one) for one in found]}, lines, as_json=as_json)


@click.command()
@store_option
@json_option
def verify(store: Path, as_json: bool) -> int:
    """Read the whole store and compare it with what was written."""
    from ingest.ledger import Store

    findings = Store(store).verify()
    told = [f"{store}/{one.file}: {one.what}\n  {one.remedy}" for one in findings]
    say(
        {"store": str(store), "findings": [asdict(one) for one in findings]},
        told or [f"{store}: every part is as it was written"],
        as_json=as_json,
    )
    return YOURS if findings else FINE
