"""What commands share: options, exit codes, and how a result is printed."""

from __future__ import annotations

import json
from collections.abc import Iterable
from pathlib import Path
from typing import Any

import click

from monitor.page.launch import DEFAULT_PORT

# Exit codes; 1 is Python's own for a fault of ours, 130 the shell's for Ctrl+C.
FINE, YOURS, STOPPED = 0, 2, 130
STOPPED_WORDS = "Stopped. The store holds the last pass that was finished."

file_path = click.Path(dir_okay=False, path_type=Path)
seconds = click.FloatRange(0.1, 3600)
folder_path = click.Path(file_okay=False, path_type=Path)
units_option = click.option(
    "--unit",
    "unit_files",
    type=file_path,
    multiple=True,
    required=True,
    help="Unit file; give it again for more units.",
)
store_option = click.option(
    "--store", type=folder_path, default=Path("outlet-store"), show_default=True, help="Folder of the store."
)
port_option = click.option(
    "--port",
    type=click.IntRange(1024, 65535),
    default=DEFAULT_PORT,
    show_default=True,
    help="Port on 127.0.0.1.",
)
unit_option = click.option("--unit", "unit_file", type=file_path, required=True, help="Unit file.")
day = click.DateTime(formats=["%Y-%m-%d"])
json_option = click.option("--json", "as_json", is_flag=True, help="Print one JSON object.")


def say(data: dict[str, Any], told: Iterable[str], *, as_json: bool) -> None:
    """Print one JSON object for programs, or lines for people.

    Parameters
    ----------
    data : dict
        For programs.
    told : iterable of str
        For people.
    as_json : bool
        Which of them.
    """
    if as_json:
        click.echo(json.dumps(data, indent=1, ensure_ascii=False, default=str))
    else:
        for line in told:
            click.echo(line)
