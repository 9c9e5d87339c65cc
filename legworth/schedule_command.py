"""The command that makes stations, legs and itineraries of a schedule: schedule."""

from __future__ import annotations

from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from legworth.options import AS_JSON, EXIT_CODES, print_json

if TYPE_CHECKING:
    from legworth.schedules import Places, ScheduleOptions
    from legworth.schedules.folder import FolderOptions

__all__ = ["schedule"]

TABLE = click.Path(path_type=Path, dir_okay=False)
DATE = click.DateTime(formats=["%Y-%m-%d"])


@click.command(epilog=EXIT_CODES)
@click.argument("file", type=click.Path(path_type=Path))
@click.option(
    "--out",
    type=click.Path(path_type=Path, file_okay=False),
    required=True,
    help="Network folder; made if it is not there. Its fares, demand and curves are left alone.",
)
@click.option("--from", "first", type=DATE, required=True, metavar="DATE", help="First date, YYYY-MM-DD.")
@click.option("--to", "last", type=DATE, required=True, metavar="DATE", help="Last date, included.")
@click.option(
    "--format",
    "schedule_format",
    type=click.Choice(["auto", "ssim", "gtfs", "csv"]),
    default="auto",
    show_default=True,
    help="Airline schedule (SSIM chapter 7), GTFS feed, or plain table of flights; auto tells by the content.",
)
@click.option(
    "--stations",
    type=TABLE,
    help="Table of stations with columns as in stations.csv, all of them; coordinates, zones and connection times "
    "are taken from it. If left out, from the folder's own stations.",
)
@click.option("--seats", type=TABLE, help="Table of seats by equipment; for GTFS by trip, route or route type.")
@click.option(
    "--service-types", metavar="LETTERS", help="SSIM service types taken; if left out, passenger services BGJQRSU."
)
@click.option("--cabins", metavar="LETTERS", help="SSIM cabins whose seats count; all if left out.")
@click.option("--partner-legs", is_flag=True, help="Keep SSIM codeshare legs whose operating leg is not in the file.")
@click.option("--kinds", metavar="WORDS", help="GTFS kinds of routes taken, such as rail,coach,ferry; all if left out.")
@click.option(
    "--itineraries/--no-itineraries", default=True, show_default=True, help="Also join legs into itineraries."
)
@click.option(
    "--all-pairs",
    is_flag=True,
    help="Make itineraries between all stations; otherwise, where FOLDER has fares or demand, only between those with "
    "any.",
)
@click.option("--name", help="Name of the network, for a new network.toml; the file's name if left out.")
@click.option("--currency", help="Currency, likewise; XXX, which stands for none, if left out.")
@click.option("--as-of", metavar="INSTANT", help="Snapshot, likewise; midnight UTC a day before --from if left out.")
@AS_JSON
def schedule(file: Path, out: Path, *, stations: Path | None, seats: Path | None, as_json: bool, **how: Any) -> None:
    """Make stations, legs and itineraries of FILE: an airline schedule, a GTFS feed, or a plain table of flights."""
    from legworth.progress import progress_bar
    from legworth.schedules import read_schedule, read_seats
    from legworth.schedules.folder import make_folder
    from legworth.schedules.report import print_schedule, schedule_as_json

    reading, making = _reading(how), _making(file, how)
    timetable = read_schedule(file, _places(stations, out), read_seats(seats), reading)
    with progress_bar("Joining legs") as progress:
        made = make_folder(out, timetable, making, progress)
    if as_json:
        print_json(schedule_as_json(out, timetable, made))
        return
    print_schedule(out, timetable, made)


def _places(stations: Path | None, out: Path) -> Places:
    """Stations of the table given, or else those that the folder has already."""
    from legworth.schedules import read_places

    if stations is not None:
        return read_places(stations, complete=True)
    own = [path for ending in ("csv", "parquet") if (path := out / f"stations.{ending}").is_file()]
    return read_places(own[0] if own else None, complete=False)


def _reading(how: dict[str, Any]) -> ScheduleOptions:
    from legworth.schedules import GtfsOptions, ScheduleOptions, SsimOptions, Window

    usual = SsimOptions()
    kinds = how["kinds"]
    return ScheduleOptions(
        window=Window(how["first"].date(), how["last"].date()),
        schedule_format=None if how["schedule_format"] == "auto" else how["schedule_format"],
        ssim=SsimOptions(
            service_types=_letters("--service-types", how["service_types"]) or usual.service_types,
            cabins=_letters("--cabins", how["cabins"]),
            partner_legs=how["partner_legs"],
        ),
        gtfs=GtfsOptions(() if kinds is None else tuple(kind.strip() for kind in kinds.split(","))),
    )


def _letters(option: str, text: str | None) -> str:
    from network import SettingError

    if text is None:
        return ""
    if not (text.isascii() and text.isalpha() and text.isupper()):
        raise SettingError(f"{option} {text!r} is not a word of capital letters; write letters like CY")
    return text


def _making(file: Path, how: dict[str, Any]) -> FolderOptions:
    from legworth.schedules.folder import NO_CURRENCY, FolderOptions
    from network import SettingError

    as_of = how["first"].replace(tzinfo=UTC) - timedelta(days=1)
    if how["as_of"] is not None:
        try:
            as_of = datetime.fromisoformat(how["as_of"])
        except ValueError as error:
            raise SettingError(
                f"--as-of {how['as_of']!r} is not a date and time; write 2027-03-01T06:40+01:00"
            ) from error
    return FolderOptions(
        name=file.stem if how["name"] is None else how["name"],
        currency=NO_CURRENCY if how["currency"] is None else how["currency"],
        as_of=as_of,
        itineraries=how["itineraries"],
        all_pairs=how["all_pairs"],
    )
