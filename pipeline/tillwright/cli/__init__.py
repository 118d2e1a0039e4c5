"""The command `tillwright`.

Exit status: 0 done, 1 done but something is held for a decision, 2 the plan or the call is wrong,
3 the data cannot be used.
"""

from __future__ import annotations

import signal
import sys
import tempfile
import traceback

import click

from tillwright import __version__
from tillwright.cli.hedonics import hedonic_command
from tillwright.cli.panels import contributions_command, index_command, places_command
from tillwright.cli.plans import compile_command, definitions_command, intake_command
from tillwright.cli.successions import successions_command
from tillwright.errors import CallError, DataError, TillwrightError


def main() -> None:
    """Run the command and leave with its exit status; never with a traceback."""
    # Prefect takes SIGTERM for itself; as an exit, what was done so far is recorded first.
    signal.signal(signal.SIGTERM, lambda *_: sys.exit(143))
    try:
        status = commands.main(standalone_mode=False)
    except click.ClickException as error:
        error.show()
        status = CallError.exit_status
    except (click.Abort, KeyboardInterrupt):
        click.echo("Interrupted. Finished steps are kept; the same command goes on from there.", err=True)
        status = 130
    except TillwrightError as error:
        click.echo(str(error), err=True)
        status = error.exit_status
    except OSError as error:
        click.echo(
            f"{error.filename or 'A file'} cannot be used: {error.strerror or error}. Finished steps are kept.",
            err=True,
        )
        status = DataError.exit_status
    except Exception as error:  # noqa: BLE001 - the last resort: a message instead of a traceback
        click.echo(_defect(error), err=True)
        status = DataError.exit_status
    sys.exit(status)


def _defect(error: Exception) -> str:
    with tempfile.NamedTemporaryFile("w", prefix="tillwright-", suffix=".txt", delete=False, encoding="utf-8") as file:
        traceback.print_exception(error, file=file)
    return (
        f"Tillwright stopped on an error that it does not know: {type(error).__name__}: {error}. Finished steps are "
        f"kept. This is a defect; please report it with {file.name}, which says where it happened."
    )


@click.group(context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 100})
@click.version_option(__version__, prog_name="tillwright")
def commands() -> None:
    """From till records to price indexes that can be published and defended.

    Exit status: 0 done, 1 done but something is held for a decision, 2 the plan or the call is
    wrong, 3 the data cannot be used.
    """


for command in (
    compile_command,
    intake_command,
    index_command,
    places_command,
    contributions_command,
    hedonic_command,
    successions_command,
    definitions_command,
):
    commands.add_command(command)
