"""Options and habits that the commands share.

Heavy libraries are imported by the functions that use them, so that ``--help`` answers at once.
"""

from __future__ import annotations

import json
import sys
from collections.abc import Callable, Iterable
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from legworth.option_types import Figure

if TYPE_CHECKING:
    from legworth.pricing import PricedNetwork, PricingOptions
    from network import Fault

__all__ = [
    "AS_JSON",
    "EXIT_CODES",
    "FOLDER",
    "priced_folder",
    "pricing_from",
    "pricing_options",
    "print_json",
    "print_warnings",
]

EXIT_CODES = """\b
Exit codes:
  0    done
  1    something failed that is not of the kinds below
  2    the tables, an option or a setting are wrong; every fault is listed
  3    no certified optimum was reached, so no price is given
  4    a check stopped the night; the last night stays in force
  130  interrupted
"""

FOLDER = click.argument("folder", type=click.Path(path_type=Path))
AS_JSON = click.option("--json", "as_json", is_flag=True, help="Print one JSON document instead of text.")


def program_options(command: Callable[..., None]) -> Callable[..., None]:
    """Add the options that decide how a linear program is solved."""
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
        click.option(
            "--time-limit", type=Figure(0, min_open=True), help="Seconds that the solver may take for one program."
        ),
        click.option(
            "--samples",
            type=click.IntRange(2),
            default=30,
            show_default=True,
            help="Outcomes of demand drawn (randomised).",
        ),
        click.option(
            "--seed", type=click.IntRange(0), default=1, show_default=True, help="Seed of the draw (randomised)."
        ),
        click.option(
            "--jobs", type=click.IntRange(1), default=1, show_default=True, help="Components solved side by side."
        ),
    ]
    for option in reversed(options):
        command = option(command)
    return command


def pricing_options(command: Callable[..., None]) -> Callable[..., None]:
    """Add the options that decide how a folder is priced: the program, and leg control."""
    classes = click.option(
        "--virtual-classes",
        type=click.IntRange(1),
        help="Cut the products of a leg into at most this many classes for EMSR-b.",
    )
    return classes(program_options(command))


def print_warnings(warnings: Iterable[Fault]) -> None:
    """Print the warnings of a network folder on standard error."""
    for warning in warnings:
        click.echo(str(warning), err=True)


def priced_folder(folder: Path, how: dict[str, Any]) -> PricedNetwork:
    """Price a folder as the options say, with progress on a terminal."""
    from legworth.pricing import price_folder
    from legworth.progress import progress_bar

    with progress_bar("Pricing legs") as progress:
        return price_folder(folder, pricing_from(how), progress)


def pricing_from(how: dict[str, Any]) -> PricingOptions:
    """Turn the values of `pricing_options` into options."""
    from heuristics import LegControl
    from legworth.curves import CurveMethod
    from legworth.pricing import PricingOptions
    from lp import LpOptions, Method, SolverOptions

    return PricingOptions(
        lp=LpOptions(
            method=Method(how["method"]),
            solver=SolverOptions(how["solver"], how["time_limit"]),
            samples=how["samples"],
            seed=how["seed"],
        ),
        legs=LegControl(virtual_classes=how.get("virtual_classes")),
        curves=CurveMethod(how["curves"]) if how.get("curves", "none") != "none" else None,
        jobs=how["jobs"],
    )


def print_json(document: dict[str, Any]) -> None:
    """Print one JSON document, in plain ASCII where the terminal knows no more."""
    text = json.dumps(document, indent=2, ensure_ascii=False, allow_nan=False, default=str)
    try:
        text.encode(sys.stdout.encoding or "utf-8")
    except UnicodeEncodeError:
        text = json.dumps(document, indent=2, allow_nan=False, default=str)
    click.echo(text)
