"""The command that estimates demand to come from booking history: estimate."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any

import click
from click.core import ParameterSource

from legworth.option_types import Figure
from legworth.options import AS_JSON, EXIT_CODES, print_json

if TYPE_CHECKING:
    from legworth.estimation.recipe import EstimateOptions

__all__ = ["estimate"]


@click.command(epilog=EXIT_CODES)
@click.argument("history", type=click.Path(path_type=Path))
@click.option(
    "--network",
    "folder",
    type=click.Path(path_type=Path),
    required=True,
    help="Network folder; it needs no demand and no booking curves.",
)
@click.option(
    "--out",
    type=click.Path(path_type=Path, file_okay=False),
    help="Folder for demand, booking_curves, estimates, estimate.json and estimate.html; by default the network. "
    "Demand and booking curves that people put there are kept, with .before at the end of their names.",
)
@click.option(
    "--adjustments",
    type=click.Path(path_type=Path),
    help="Table of adjustments; adjustments.csv of the network folder if left out and there is one.",
)
@click.option("--no-adjustments", is_flag=True, help="Apply no adjustments.")
@click.option(
    "--unknown",
    type=click.Choice(["fault", "drop", "keep"]),
    default="fault",
    show_default=True,
    help="Itineraries of the history that the network does not know: a fault, left out, or kept to tell of classes.",
)
@click.option(
    "--may-reopen",
    is_flag=True,
    help="Classes may have been open between two readings at which they were closed; bookings in between are no fault.",
)
@click.option(
    "--closing",
    type=click.Choice(["shared", "limit", "discard", "ignore"]),
    default="shared",
    show_default=True,
    help="How classes close: with the seats that all share, at limits of their own; or leave closed intervals out, or "
    "ignore that they were closed.",
)
@click.option(
    "--pickup",
    type=click.Choice(["combined", "additive", "multiplicative"]),
    default="combined",
    show_default=True,
    help="How far bookings so far inform demand to come: as far as history shows, not at all, or in proportion.",
)
@click.option(
    "--half-life",
    type=Figure(0, min_open=True),
    default=365.0,
    show_default=True,
    help="Age in days at which a departure counts half.",
)
@click.option("--no-ageing", is_flag=True, help="Let departures of any age count alike.")
@click.option("--no-weekday", is_flag=True, help="Fit no effects of the weekday.")
@click.option("--no-season", is_flag=True, help="Fit no effects of the time of year.")
@click.option(
    "--backtest",
    type=click.IntRange(0),
    default=4,
    show_default=True,
    help="Past days from which forecasts are made anew and held against what came; 0 for no test.",
)
@click.option("--spacing", type=click.IntRange(1), default=28, show_default=True, help="Days between these days.")
@click.option(
    "--methods",
    is_flag=True,
    help="Show what other methods of unconstraining make of the same history; the page and estimate.json always do.",
)
@click.option(
    "--format",
    "table_format",
    type=click.Choice(["csv", "parquet"]),
    default="csv",
    show_default=True,
    help="Format of the tables.",
)
@AS_JSON
def estimate(
    history: Path, folder: Path, out: Path | None, table_format: Any, *, methods: bool, as_json: bool, **how: Any
) -> None:
    """Estimate the demand to come of the departures in a network folder from HISTORY, a table of booking history.

    What was booked is unconstrained by when classes were open; small itineraries borrow from ones like them; departures
    ahead take their bookings so far into account.
    """
    from legworth.estimation.estimate_files import write_estimate
    from legworth.estimation.estimate_tables import estimate_tables
    from legworth.estimation.recipe import estimate_folder
    from legworth.estimation.report import estimate_as_json, print_estimate
    from legworth.estimation.report_page import estimate_page
    from legworth.progress import progress_bar

    with progress_bar("Estimating demand") as progress:
        found = estimate_folder(history, folder, _options(how), progress)
    document = estimate_as_json(found)
    files, kept = write_estimate(out or folder, estimate_tables(found), document, estimate_page(found), table_format)
    if as_json:
        print_json({**document, "written": [str(file) for file in files], "kept": [str(file) for file in kept]})
        return
    print_estimate(found, files, kept, methods=methods)


def _options(how: dict[str, Any]) -> EstimateOptions:
    from legworth.estimation.backtest import BacktestOptions
    from legworth.estimation.estimate import DemandOptions
    from legworth.estimation.recipe import EstimateOptions
    from network import SettingError

    if how["no_adjustments"] and how["adjustments"] is not None:
        raise SettingError("--adjustments and --no-adjustments contradict each other; leave one of them out")
    given = click.get_current_context().get_parameter_source("half_life")
    if how["no_ageing"] and given is not ParameterSource.DEFAULT:
        raise SettingError("--half-life and --no-ageing contradict each other; leave one of them out")
    return EstimateOptions(
        demand=DemandOptions(
            closing=how["closing"],
            pickup=how["pickup"],
            half_life=None if how["no_ageing"] else how["half_life"],
            weekday=not how["no_weekday"],
            season=not how["no_season"],
        ),
        backtest=BacktestOptions(snapshots=how["backtest"], spacing=how["spacing"]),
        adjustments=how["adjustments"],
        adjust=not how["no_adjustments"],
        unknown=how["unknown"],
        may_reopen=how["may_reopen"],
    )
