"""Commands about the store itself: verify."""

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
