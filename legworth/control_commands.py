"""The commands of itinerary control and planning: decide, connection, change."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import click

from legworth.option_types import MOST_MONEY, MOST_SEATS, Figure, instant
from legworth.options import (
    AS_JSON,
    EXIT_CODES,
    FOLDER,
    pricing_from,
    pricing_options,
    print_json,
    print_warnings,
    program_options,
)

__all__ = ["change", "connection", "decide"]


@click.command(epilog=EXIT_CODES)
@FOLDER
@click.option(
    "--prices",
    type=click.Path(path_type=Path),
    default=Path("priced"),
    show_default=True,
    help="Folder with bid_prices, and price_curves if there are any.",
)
@click.option("--requests", type=click.Path(path_type=Path), help="Table of requests to judge, CSV or Parquet.")
@click.option("--out", type=click.Path(path_type=Path, dir_okay=False), help="File for the answers, CSV or Parquet.")
@click.option("--itinerary", help="Judge one request: the itinerary asked for.")
@click.option("--fare-class", help="Its fare class.")
@click.option("--fare", type=Figure(0, MOST_MONEY), help="Its fare for one passenger, if it is not that of the class.")
@click.option("--seats", type=click.IntRange(1, MOST_SEATS), help="Passengers who travel together.  [default: 1]")
@click.option(
    "--moment",
    metavar="INSTANT",
    callback=instant,
    help="Instant of the request, ISO 8601 with offset, not before the snapshot; the snapshot if left out.",
)
@AS_JSON
def decide(
    folder: Path, prices: Path, requests: Path | None, out: Path | None, *, as_json: bool, **request: Any
) -> None:
    """Accept or refuse requests on FOLDER by the prices in force, each by itself, and say why."""
    from legworth.control_report import decisions_as_json, print_decisions
    from legworth.decisions import decide as decided
    from legworth.decisions import decisions_table
    from legworth.price_table import prices_made_for, read_prices
    from legworth.request_table import one_request, read_requests
    from legworth.writing import write_table
    from network import read_folder

    if (requests is None) == (request["itinerary"] is None):
        raise click.UsageError("give either --requests FILE or --itinerary NAME")
    single = [f"--{name.replace('_', '-')}" for name, value in request.items() if value is not None]
    if requests is not None and single:
        raise click.UsageError(f"--requests says all of every request; leave {' and '.join(single)} out")
    read = read_folder(folder)
    print_warnings(read.warnings)
    network = read.network
    table = read_prices(prices, network)
    if requests is None:
        asked, wanted = one_request(network, **request)
    else:
        asked, wanted = read_requests(requests, network)
    answers = decisions_table(network, asked, wanted, decided(network, table, wanted))
    source = prices_made_for(prices, network)
    if out is not None:
        write_table(out, answers)
    if as_json:
        print_json(decisions_as_json(answers, source))
        return
    print_decisions(network, answers, source)


@click.command(epilog=EXIT_CODES)
@FOLDER
@click.option("--itinerary", help="The itinerary to study.")
@click.option("--from", "origin", help="Study all itineraries from this station ...")
@click.option("--to", "destination", help="... to this one.")
@click.option("--party", type=click.IntRange(1, 1000), default=10, show_default=True, help="Largest party looked at.")
@click.option(
    "--picture", type=click.Path(path_type=Path, dir_okay=False), help="File for a picture of value by party size."
)
@pricing_options
@AS_JSON
def connection(
    folder: Path,
    itinerary: str | None,
    origin: str | None,
    destination: str | None,
    party: int,
    picture: Path | None,
    *,
    as_json: bool,
    **how: Any,
) -> None:
    """Study itineraries of FOLDER: what they displace by class and party, exactly, and whom."""
    from legworth.connection import itineraries_between, itinerary_named, study_connection
    from legworth.control_report import connections_as_json, print_connections
    from legworth.picture import draw_parties
    from network import read_folder

    between = (origin is not None, destination is not None)
    if any(between) != all(between) or (itinerary is not None) == any(between):
        raise click.UsageError("give either --itinerary NAME or both --from STATION and --to STATION")
    read = read_folder(folder)
    print_warnings(read.warnings)
    network = read.network
    if itinerary is not None:
        chosen = [itinerary_named(network, itinerary)]
    else:
        chosen = itineraries_between(network, str(origin), str(destination))
    studies = study_connection(network, chosen, list(range(1, party + 1)), pricing_from(how))
    if picture is not None:
        draw_parties(network, studies, picture)
    if as_json:
        print_json(connections_as_json(studies, None if picture is None else str(picture)))
        return
    print_connections(network, studies, how["method"])
    if picture is not None:
        click.echo(f"Picture: {picture}")


@click.command(epilog=EXIT_CODES)
@FOLDER
@click.option(
    "--seats", multiple=True, metavar="LEG=+N", help="So many seats more (+N) or fewer (-N) on a leg; may be repeated."
)
@click.option("--cancel", multiple=True, metavar="LEG", help="A leg that does not run; may be repeated.")
@click.option("--fare", multiple=True, metavar="ITINERARY/CLASS=F", help="Another fare; may be repeated.")
@click.option(
    "--becomes",
    type=click.Path(path_type=Path),
    help="Another network folder to compare with, such as one with a new leg.",
)
@program_options
@AS_JSON
def change(
    folder: Path,
    seats: tuple[str, ...],
    cancel: tuple[str, ...],
    fare: tuple[str, ...],
    becomes: Path | None,
    *,
    as_json: bool,
    **how: Any,
) -> None:
    """Price FOLDER before and after a change: revenue, and the legs whose prices move most."""
    from legworth.change import study_change
    from legworth.changed_network import changed_network, parse_changes
    from legworth.control_report import change_as_json, print_change
    from network import read_folder

    changes = parse_changes(seats, cancel, fare)
    if not changes and becomes is None:
        raise click.UsageError("name a change: --seats, --cancel, --fare or --becomes")
    read = read_folder(folder)
    other = read if becomes is None else read_folder(becomes)
    print_warnings(read.warnings if becomes is None else (*read.warnings, *other.warnings))
    before = read.network
    after = changed_network(other.network, changes)
    options = pricing_from(how)
    study = study_change(before, after, options.lp, options.jobs)
    if as_json:
        print_json(change_as_json(study))
        return
    print_change(before, study, str(options.lp.method))
