"""The command that plays whole booking horizons: simulate."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from legworth.option_types import MOST_MONEY, Figure
from legworth.options import AS_JSON, EXIT_CODES, FOLDER, print_json, print_warnings

if TYPE_CHECKING:
    from legworth.simulation import Simulation, SimulationOptions
    from legworth.simulation.attendance import Attendance

__all__ = ["simulate"]


@click.command(epilog=EXIT_CODES)
@FOLDER
@click.option(
    "--out",
    type=click.Path(path_type=Path, file_okay=False),
    default=Path("simulated"),
    show_default=True,
    help="Folder for simulation.csv, simulation.json and simulation.html; made if it is not there.",
)
@click.option("--paths", type=click.IntRange(2), default=1000, show_default=True, help="Booking horizons played.")
@click.option("--seed", type=click.IntRange(0), default=1, show_default=True, help="Seed that reproduces every digit.")
@click.option(
    "--methods",
    metavar="NAMES",
    help="Controls to play, with commas between: first-come, leg, adjusted, virtual, deterministic, probabilistic, "
    "randomised, curves, fare-splits; with + at the end re-optimised at every reading. leg+ always takes part. "
    "If left out, all but fare-splits.",
)
@click.option(
    "--reoptimised-paths",
    type=click.IntRange(0),
    default=10,
    show_default=True,
    help="Paths played by re-optimised controls that need a linear program for every path and reading; 0 for none.",
)
@click.option(
    "--readings",
    type=click.IntRange(1),
    default=16,
    show_default=True,
    help="Instants of re-optimisation, closer and closer towards departure.",
)
@click.option(
    "--reading-days", metavar="DAYS", help="Days before the last departure to re-optimise at instead, 14,7,3,1."
)
@click.option("--leg", "legs", multiple=True, metavar="LEG", help="A leg to follow over time; may be repeated.")
@click.option(
    "--demand-factor",
    type=Figure(0, 10, min_open=True),
    default=1.0,
    show_default=True,
    help="Play with so many times the demand to come.",
)
@click.option("--fare-splits", is_flag=True, help="Bound revenue by the best fare splits too (slow).")
@click.option("--stress", is_flag=True, help="Play the same paths with controls prepared from wrong forecasts.")
@click.option("--cancel-rate", metavar="RATES", help="Share of bookings cancelled: 0.1, or by class A=0.02,*=0.1.")
@click.option("--no-show-rate", metavar="RATES", help="Share of the rest who do not turn up, likewise.")
@click.option(
    "--authorised",
    type=Figure(1, 2),
    default=1.0,
    show_default=True,
    help="Seats authorised for sale for one of capacity.",
)
@click.option(
    "--denied-boarding-cost",
    type=Figure(0, MOST_MONEY),
    default=0.0,
    show_default=True,
    help="Currency a passenger and leg.",
)
@click.option("--jobs", type=click.IntRange(1), default=1, show_default=True, help="Processes side by side.")
@AS_JSON
def simulate(folder: Path, out: Path, *, stress: bool, as_json: bool, **how: Any) -> None:
    """Play whole booking horizons of FOLDER under several controls: which earns what, and how sure that is."""
    from legworth.progress import progress_bar
    from legworth.simulation import result_table
    from legworth.simulation import simulate as simulated
    from legworth.simulation.files import write_simulation
    from legworth.simulation.page import simulation_page
    from legworth.simulation.report import print_simulation, simulation_as_json
    from network import read_folder

    options = _options(how)
    read = read_folder(folder)
    print_warnings(read.warnings)
    network = read.network
    with progress_bar("Playing paths") as progress:
        found = simulated(
            network, options, progress=lambda done, total: progress(round(1000 * done), round(1000 * total))
        )
    lines = _stressed(found) if stress else []
    table = result_table(found)
    document = simulation_as_json(found, table, lines)
    files = write_simulation(out, table, document, simulation_page(found, table, lines))
    if as_json:
        print_json(document)
        return
    print_simulation(found, table, lines, files)


def _options(how: dict[str, Any]) -> SimulationOptions:
    from legworth.simulation import REOPTIMISED, STANDARD, SimulationOptions

    names = how["methods"]
    return SimulationOptions(
        paths=how["paths"],
        seed=how["seed"],
        methods=(*STANDARD, *REOPTIMISED) if names is None else tuple(name.strip() for name in names.split(",")),
        reoptimised_paths=how["reoptimised_paths"],
        readings=how["readings"],
        reading_days=_days(how["reading_days"]),
        demand_factor=how["demand_factor"],
        fare_splits=how["fare_splits"],
        attendance=_attendance(how),
        legs=how["legs"],
        jobs=how["jobs"],
    )


def _attendance(how: dict[str, Any]) -> Attendance | None:
    from legworth.simulation.attendance import Attendance, rates_by_class

    cancelled, absent = (
        () if text is None else rates_by_class(text) for text in (how["cancel_rate"], how["no_show_rate"])
    )
    found = Attendance(cancelled, absent, how["authorised"], how["denied_boarding_cost"])
    return None if found == Attendance() else found


def _days(text: str | None) -> tuple[float, ...] | None:
    from network import SettingError

    if text is None:
        return None
    try:
        return tuple(float(day) for day in text.split(","))
    except ValueError:
        raise SettingError(f"--reading-days {text!r} is not a list of numbers; write days like 14,7,3,1") from None


def _stressed(found: Simulation) -> list[Any]:
    from legworth.progress import progress_bar
    from legworth.simulation.forecast import STRESSES
    from legworth.simulation.stress import under_stress

    cases = list(STRESSES)
    with progress_bar("Playing wrong forecasts") as progress:

        def told(case: str, done: float, total: float) -> None:
            progress(round(1000 * (cases.index(case) + done / max(total, 1e-9))), 1000 * len(cases))

        return under_stress(found, told)
