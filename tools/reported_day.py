"""A day of flights as US carriers reported it, made a schedule: ``python -m tools.reported_day --help``.

Reported are departure (clock time at the airport), both airports and the distance in statute miles. Assumed, by these
rules, is the rest:

- *Offset from UTC* in January, by longitude: east of 86.5 W -05:00, to 102 W -06:00, to 114 W -07:00, to 130 W -08:00.
  Beyond stand Alaska, -09:00, and south of 30 N Hawaii, -10:00; Puerto Rico and the Virgin Islands, east of 68 W and
  south of 20 N, have -04:00. Four airports lie on the other side of a band than their clocks (`OTHER_HOURS`).
  All from memory; no summer time in January.
- *Arrival*: departure + miles at 430 knots + 30 minutes, rounded to the minute, in the offset of the destination; so a
  late flight arrives on the next date.
- *Seats*: drawn per flight from the vehicles of its distance (`tools.assumed_market`).
"""

from __future__ import annotations

from datetime import date
from pathlib import Path

import click
import numpy as np
import pandas as pd

from tools.assumed_market import assumed_seats
from tools.invented_traffic import IntArray

__all__ = ["DAY", "offsets", "read_day", "write_schedule"]

DAY = date(2001, 1, 10)
KNOTS = 430
GROUND_MINUTES = 30
STATUTE_PER_NAUTICAL_MILE = 1.852 / 1.609344
"""Exact by definition of both miles."""
BAND_EDGES = (-130.0, -114.0, -102.0, -86.5)
"""Degrees of longitude; west of the first the offset is -9 hours, and one hour more past each edge."""
OTHER_HOURS = {"BOI": -7, "FCA": -7, "MAF": -6, "MSO": -7}
CONNECTION = 40
"""Least connection time everywhere, minutes."""


def offsets(airports: pd.DataFrame) -> pd.Series:
    """Minutes from UTC of the clock of every airport, west negative, by name."""
    lat, lon = airports["latitude"].to_numpy(), airports["longitude"].to_numpy()
    hours = np.searchsorted(BAND_EDGES, lon, side="right") - 9
    hours = np.where((lon < BAND_EDGES[0]) & (lat < 30), -10, hours)
    hours = np.where((lon > -68) & (lat < 20), -4, hours)
    hours = airports["airport"].map(OTHER_HOURS).fillna(pd.Series(hours)).astype(np.int64)
    return pd.Series(60 * hours.to_numpy(), index=airports["airport"])


def read_day(flights: Path, airports: Path) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Read reported flights, and the airports that they use.

    Returns
    -------
    flights
        By departure: ``leg``, ``origin``, ``destination``, ``clock``, ``miles``, instants ``departs`` and ``arrives``
        with offset, ``start`` and ``end`` in minutes after midnight UTC.
    airports
        By name: ``airport``, ``city``, ``latitude``, ``longitude``.
    """
    reported, places = pd.read_csv(flights), pd.read_csv(airports)
    used = set(reported["origin"]) | set(reported["destination"])
    places = places[places["airport"].isin(used)].sort_values("airport", ignore_index=True)
    return _timed(reported, places), places


def _timed(reported: pd.DataFrame, airports: pd.DataFrame) -> pd.DataFrame:
    """Give the flights names, and instants with assumed arrivals and offsets; ``start`` and ``end`` are UTC minutes."""
    flights = reported.rename(columns={"departs": "clock"})
    offset = offsets(airports)
    clock = flights["clock"].str.split(":", expand=True).astype(int)
    nautical = flights["miles"] / STATUTE_PER_NAUTICAL_MILE
    minutes = (nautical / KNOTS * 60 + GROUND_MINUTES).round().astype(int)
    from_utc, to_utc = (offset[flights[end]].to_numpy() for end in ("origin", "destination"))
    flights["start"] = clock[0] * 60 + clock[1] - from_utc
    flights["end"] = flights["start"] + minutes
    flights["departs"] = _instants(flights["start"].to_numpy(), from_utc)
    flights["arrives"] = _instants(flights["end"].to_numpy(), to_utc)
    flights["leg"] = flights["origin"] + "-" + flights["destination"] + "-" + flights["clock"].str.replace(":", "")
    twin = flights.groupby("leg").cumcount()
    flights["leg"] += np.where(twin > 0, "-" + (twin + 1).astype(str), "")
    return flights.sort_values(["start", "leg"], ignore_index=True)


def _instants(utc: IntArray, offset: IntArray) -> list[str]:
    """Write minutes after midnight UTC as ISO 8601 in the given offsets, minutes west negative."""
    local = np.datetime64(DAY, "m") + (utc + offset).astype("timedelta64[m]")
    return [f"{instant}{hours:+03d}:00" for instant, hours in zip(local, offset // 60, strict=True)]


def write_schedule(flights: pd.DataFrame, airports: pd.DataFrame, folder: Path, seed: int) -> None:
    """Write the day as a plain schedule: ``flights.csv`` as `legworth schedule` reads it, and ``stations.csv``.

    Flights are numbered from 1 by departure. Clocks are given as zones of fixed offset (``Etc/GMT+5`` is UTC -05:00).
    """
    seats = assumed_seats(flights["miles"].to_numpy(), np.random.default_rng(seed))
    arrives = flights["arrives"].str
    schedule = pd.DataFrame(
        {
            "carrier": "RP",
            "number": np.arange(1, len(flights) + 1),
            "origin": flights["origin"],
            "destination": flights["destination"],
            "departs": flights["clock"],
            "arrives": arrives[11:16],
            "arrives_day": (pd.to_datetime(arrives[:10]) - pd.Timestamp(DAY)).dt.days,
            "from": DAY,
            "to": DAY,
            "days": DAY.isoweekday(),
            "seats": seats,
        }
    )
    stations = airports.rename(columns={"airport": "station", "city": "name"})
    zone = [f"Etc/GMT{-minutes // 60:+d}" for minutes in offsets(airports)]
    folder.mkdir(parents=True, exist_ok=True)
    schedule.to_csv(folder / "flights.csv", index=False, lineterminator="\n")
    stations.assign(minimum_connection=CONNECTION, timezone=zone).to_csv(
        folder / "stations.csv", index=False, lineterminator="\n"
    )


@click.command()
@click.option("--flights", type=click.Path(path_type=Path, exists=True), required=True, help="Reported flights.")
@click.option("--airports", type=click.Path(path_type=Path, exists=True), required=True, help="Places of the airports.")
@click.option("--out", type=click.Path(path_type=Path), required=True, help="Folder for flights.csv and stations.csv.")
@click.option("--seed", default=20010110, show_default=True, help="Seed of the assumed seats.")
def main(flights: Path, airports: Path, out: Path, seed: int) -> None:
    """Make a schedule of a day of reported flights."""
    day, places = read_day(flights, airports)
    write_schedule(day, places, out, seed)
    click.echo(f"{len(day):,} flights, {len(places):,} stations")


if __name__ == "__main__":
    main()
