"""The commands that read and price a network folder: check, price, compare."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import click

from legworth.options import AS_JSON, EXIT_CODES, FOLDER, priced_folder, pricing_options, print_json

__all__ = ["check", "compare", "price"]


@click.command(epilog=EXIT_CODES)
@FOLDER
@AS_JSON
def check(folder: Path, *, as_json: bool) -> None:
    """Read the tables of FOLDER and list every fault, without pricing anything."""
    from network import components, read_folder

    read = read_folder(folder)
    pieces = components(read.network)
    if as_json:
        from legworth.report import faults_as_json, sizes

        print_json({"ok": True, "faults": faults_as_json(read.warnings), **sizes(read.network, len(pieces))})
        return
    from legworth.report import print_check

    print_check(read.network, read.warnings, len(pieces))


@click.command(epilog=EXIT_CODES)
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
@click.option(
    "--curves",
    type=click.Choice(["none", "decomposition", "fare-splits"]),
    default="none",
    show_default=True,
    help="Also write price_curves: bid prices by seats left and days before departure, displaced by the "
    "deterministic program's prices, or by fare splits (slower, a tighter bound).",
)
@pricing_options
@AS_JSON
def price(folder: Path, out: Path, table_format: Any, *, as_json: bool, **how: Any) -> None:
    """Price FOLDER: bid prices, protection levels, comparison and connections, written to --out."""
    from legworth.writing import write_results

    priced = priced_folder(folder, how)
    write_results(out, priced.tables, priced.summary, table_format)
    if as_json:
        print_json(priced.summary)
        return
    from legworth.report import print_prices

    print_prices(priced, out, table_format)


@click.command(epilog=EXIT_CODES)
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
    from legworth.picture import draw_comparison
    from legworth.report import comparison_as_json, print_comparison

    priced = priced_folder(folder, how)
    draw_comparison(priced, picture, top)
    if as_json:
        print_json(comparison_as_json(priced, top, picture))
        return
    print_comparison(priced, top, picture)
