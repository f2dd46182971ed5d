"""The commands gathered, and the one place where an error becomes an exit code.

Libraries that take long to import are imported inside the command that needs them.
"""

from __future__ import annotations

import os
import sys

import click

from ingest.errors import OutletError
from monitor.commands.alerting import alerts
from monitor.commands.asking import ageing, check, describe, lag, suspects
from monitor.commands.keeping import exports, verify
from monitor.commands.notifying import notify
from monitor.commands.reporting import exclude, month
from monitor.commands.running import demo, follow, page, run
from monitor.commands.shared import FINE, STOPPED, STOPPED_WORDS, YOURS
from monitor.commands.trying import try_limits

# Matrices here are small: more threads of the linear algebra cost twice the processor time and no less time.
os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")


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
        click.echo(STOPPED_WORDS, err=True)
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


for one in (
    demo,
    check,
    describe,
    run,
    follow,
    page,
    alerts,
    try_limits,
    notify,
    lag,
    suspects,
    ageing,
    exports,
    verify,
    month,
    exclude,
):
    outlet.add_command(one)
