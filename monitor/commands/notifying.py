"""Commands about notices: send what is due, or try a target."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import asdict
from datetime import UTC, datetime
from pathlib import Path

import click

from monitor.commands.shared import FINE, YOURS, json_option, say, store_option, units_option


@click.command()
@units_option
@store_option
@click.option("--test", "name", default="", help="Send only a test, to the target of this name.")
@json_option
def notify(unit_files: Sequence[Path], store: Path, name: str, as_json: bool) -> int:
    """Send the notices of alerts that are due: `run` and `follow` do it too, after each pass.

    What does not arrive is tried again later and later, for a week; the exit code is then 2.
    """
    from ingest.unitfile import load
    from monitor.posting import post, post_trial
    from monitor.tellnotices import posted, troubles

    units, now = [load(file) for file in unit_files], datetime.now(UTC)
    if name:
        wrong = post_trial(units, name, now)
        told = [] if wrong else [f"{name}: the test has arrived"]
        say({"target": name, "arrived": not wrong, "trouble": wrong}, told, as_json=as_json)
    else:
        results = post(units, store, now)
        wrong = tuple(troubles(results))
        say({"targets": [asdict(one) for one in results]}, posted(results), as_json=as_json)
    for words in wrong:
        click.echo(words, err=True)
    return YOURS if wrong else FINE
