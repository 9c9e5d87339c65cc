"""The command line: all commands, and what becomes of errors.

Exit codes are those of `network.errors`.
"""

from __future__ import annotations

import io
import sys
from typing import TYPE_CHECKING, NoReturn

import click

from legworth import __version__
from legworth.control_commands import change, connection, decide
from legworth.estimate_command import estimate
from legworth.nights_commands import nights
from legworth.options import EXIT_CODES, print_json
from legworth.pricing_commands import check, compare, price
from legworth.refresh_command import refresh
from legworth.schedule_command import schedule
from legworth.service_commands import serve, tokens
from legworth.simulate_command import simulate

if TYPE_CHECKING:
    from network.errors import LegworthError

__all__ = ["cli", "main"]


@click.group(epilog=EXIT_CODES, context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(__version__, prog_name="legworth")
def cli() -> None:
    """Bid prices and protection levels for carriers that sell connecting itineraries.

    A network folder holds network.toml and the tables stations, legs, itineraries, fares, demand and
    booking_curves, as CSV or Parquet.
    """


for command in (
    check,
    price,
    compare,
    decide,
    connection,
    change,
    schedule,
    simulate,
    refresh,
    nights,
    serve,
    tokens,
    estimate,
):
    cli.add_command(command)


def _fail(error: LegworthError, *, as_json: bool) -> NoReturn:
    from network.counted import counted
    from network.errors import InputError

    faults = error.faults if isinstance(error, InputError) else ()
    if as_json:
        from legworth.report import faults_as_json

        print_json({"ok": False, "error": str(error), "faults": faults_as_json(faults)})
    else:
        click.echo(str(error), err=True)
        if faults:
            count = sum(fault.count for fault in faults)
            click.echo(f"{counted(count, 'fault')}; nothing was computed or written", err=True)
    sys.exit(error.exit_code)


def main() -> None:
    """Run the command line; errors raised on purpose become one line each and an exit code."""
    as_json = "--json" in sys.argv
    if isinstance(sys.stdout, io.TextIOWrapper):
        sys.stdout.reconfigure(errors="backslashreplace")
    try:
        cli.main(prog_name="legworth", standalone_mode=False)
    except click.exceptions.Abort:
        click.echo("interrupted", err=True)
        sys.exit(130)
    except click.exceptions.ClickException as error:
        if as_json:
            print_json({"ok": False, "error": error.format_message(), "faults": []})
        else:
            error.show()
        sys.exit(error.exit_code)
    except click.exceptions.Exit as stop:
        sys.exit(stop.exit_code)
    except Exception as error:
        from network.errors import LegworthError

        if not isinstance(error, LegworthError):
            raise
        _fail(error, as_json=as_json)


if __name__ == "__main__":
    main()
