"""The command line.

Heavy libraries are imported by the commands that use them, so that ``--help`` answers at once. Exit codes
are those of `network.errors`.
"""

from __future__ import annotations

import json
import sys
from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING, Any, NoReturn

import click

from legworth import __version__

if TYPE_CHECKING:
    from legworth.pricing import PricedNetwork, PricingOptions
    from network.errors import LegworthError

__all__ = ["cli", "main"]

EXIT_CODES = """\b
Exit codes:
  0    done
  1    something failed that is not of the kinds below
  2    the tables, an option or a setting are wrong; every fault is listed
  3    no certified optimum was reached, so no price is given
  130  interrupted
"""

FOLDER = click.argument("folder", type=click.Path(path_type=Path))
AS_JSON = click.option("--json", "as_json", is_flag=True, help="Print one JSON document instead of text.")


def pricing_options(command: Callable[..., None]) -> Callable[..., None]:
    """Add the options that decide how a folder is priced."""
    options = [
        click.option(
            "--method",
            type=click.Choice(["probabilistic", "deterministic", "randomised"]),
            default="probabilistic",
            show_default=True,
            help="Linear program that gives the bid prices.",
        ),
        click.option(
            "--solver", type=click.Choice(["cbc", "highs"]), default="cbc", show_default=True, help="Solver to use."
        ),
        click.option("--time-limit", type=float, help="Seconds that the solver may take for one program."),
        click.option(
            "--samples", type=int, default=30, show_default=True, help="Outcomes of demand drawn (randomised)."
        ),
        click.option("--seed", type=int, default=1, show_default=True, help="Seed of the draw (randomised)."),
        click.option(
            "--virtual-classes", type=int, help="Cut the products of a leg into at most this many classes for EMSR-b."
        ),
        click.option("--jobs", type=int, default=1, show_default=True, help="Components solved side by side."),
    ]
    for option in reversed(options):
        command = option(command)
    return command


@click.group(epilog=EXIT_CODES, context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(__version__, prog_name="legworth")
def cli() -> None:
    """Bid prices and protection levels for carriers that sell connecting itineraries.

    A network folder holds network.toml and the tables stations, legs, itineraries, fares, demand and
    booking_curves, as CSV or Parquet.
    """


@cli.command(epilog=EXIT_CODES)
@FOLDER
@AS_JSON
def check(folder: Path, *, as_json: bool) -> None:
    """Read the tables of FOLDER and list every fault, without pricing anything."""
    from network import components, read_folder  # noqa: PLC0415

    read = read_folder(folder)
    pieces = components(read.network)
    if as_json:
        from legworth.report import faults_as_json, sizes  # noqa: PLC0415

        _print_json({"ok": True, "faults": faults_as_json(read.warnings), **sizes(read.network, len(pieces))})
        return
    from legworth.report import print_check  # noqa: PLC0415

    print_check(read.network, read.warnings, len(pieces))


@cli.command(epilog=EXIT_CODES)
@FOLDER
@click.option(
    "--out",
    type=click.Path(path_type=Path, file_okay=False),
    default=Path("priced"),
    show_default=True,
    help="Folder for the results; made if it is not there.",
)
@click.option(
    "--format",
    "table_format",
    type=click.Choice(["csv", "parquet"]),
    default="csv",
    show_default=True,
    help="Format of the tables.",
)
@pricing_options
@AS_JSON
def price(folder: Path, out: Path, table_format: Any, *, as_json: bool, **how: Any) -> None:
    """Price FOLDER: bid prices, protection levels, comparison and connections, written to --out."""
    from legworth.writing import write_results  # noqa: PLC0415

    priced = _priced(folder, how)
    write_results(out, priced.tables, priced.summary, table_format)
    if as_json:
        _print_json(priced.summary)
        return
    from legworth.report import print_prices  # noqa: PLC0415

    print_prices(priced, out, table_format)


@cli.command(epilog=EXIT_CODES)
@FOLDER
@click.option(
    "--picture",
    type=click.Path(path_type=Path, dir_okay=False),
    default=Path("comparison.png"),
    show_default=True,
    help="File for the picture.",
)
@click.option("--top", type=click.IntRange(1, 1000), default=15, show_default=True, help="Disagreements shown.")
@pricing_options
@AS_JSON
def compare(folder: Path, picture: Path, top: int, *, as_json: bool, **how: Any) -> None:
    """Price FOLDER and show where network control and leg-level control disagree, largest money first."""
    from legworth.picture import draw_comparison  # noqa: PLC0415
    from legworth.report import comparison_as_json, print_comparison  # noqa: PLC0415

    priced = _priced(folder, how)
    draw_comparison(priced, picture, top)
    if as_json:
        _print_json(comparison_as_json(priced, top, picture))
        return
    print_comparison(priced, top, picture)


def _priced(folder: Path, how: dict[str, Any]) -> PricedNetwork:
    from legworth.pricing import price_folder  # noqa: PLC0415
    from legworth.progress import progress_bar  # noqa: PLC0415

    with progress_bar("Pricing legs") as progress:
        return price_folder(folder, _options(how), progress)


def _options(how: dict[str, Any]) -> PricingOptions:
    from heuristics import LegControl  # noqa: PLC0415
    from legworth.pricing import PricingOptions  # noqa: PLC0415
    from lp import LpOptions, Method, SolverOptions  # noqa: PLC0415

    return PricingOptions(
        lp=LpOptions(
            method=Method(how["method"]),
            solver=SolverOptions(how["solver"], how["time_limit"]),
            samples=how["samples"],
            seed=how["seed"],
        ),
        legs=LegControl(virtual_classes=how["virtual_classes"]),
        jobs=how["jobs"],
    )


def _print_json(document: dict[str, Any]) -> None:
    click.echo(json.dumps(document, indent=2, ensure_ascii=False, allow_nan=False, default=str))


def _fail(error: LegworthError, *, as_json: bool) -> NoReturn:
    from network.errors import InputError  # noqa: PLC0415

    faults = error.faults if isinstance(error, InputError) else ()
    if as_json:
        from legworth.report import faults_as_json  # noqa: PLC0415

        _print_json({"ok": False, "error": str(error), "faults": faults_as_json(faults)})
    else:
        click.echo(str(error), err=True)
        if faults:
            count = f"{len(faults)} faults" if len(faults) > 1 else "1 fault"
            click.echo(f"{count}; nothing was computed or written", err=True)
    sys.exit(error.exit_code)


def main() -> None:
    """Run the command line; errors raised on purpose become one line each and an exit code."""
    try:
        cli.main(standalone_mode=False)
    except click.exceptions.Abort:
        click.echo("interrupted", err=True)
        sys.exit(130)
    except click.exceptions.ClickException as error:
        error.show()
        sys.exit(error.exit_code)
    except click.exceptions.Exit as stop:
        sys.exit(stop.exit_code)
    except Exception as error:
        from network.errors import LegworthError  # noqa: PLC0415

        if not isinstance(error, LegworthError):
            raise
        _fail(error, as_json="--json" in sys.argv)


if __name__ == "__main__":
    main()
