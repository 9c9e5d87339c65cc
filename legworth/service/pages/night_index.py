"""Lists over the whole night in force: legs, itineraries, stations and disagreements, in DuckDB.

Small columns of all parts are read once for each night, by one thread, so that control keeps the other processors; a
page then asks for the few rows that it shows.
"""

from __future__ import annotations

import json
import re
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path
from typing import Any

import duckdb

from legworth.store import Night
from network.errors import NightDamagedError

__all__ = ["GivenUpError", "NightIndex", "Row"]

Row = dict[str, Any]

LEGS = """
CREATE TABLE legs AS
SELECT l.leg, l.part, l.origin, l.destination, CAST(l.departs AS VARCHAR) AS departs,
       CAST(l.arrives AS VARCHAR) AS arrives, left(CAST(l.departs AS VARCHAR), 10) AS date,
       l.capacity, b.bid_price, b.next_seat, b.expected_sales, c.adjusted_seat_value, c.leg_seat_value, c.agrees,
       CAST(dense_rank() OVER (ORDER BY CAST(l.departs AS VARCHAR)) AS INTEGER) AS departs_rank
FROM {legs} AS l JOIN {bid_prices} AS b USING (part, leg) JOIN {comparison} AS c USING (part, leg)
"""
ITINERARIES = """
CREATE TABLE itineraries AS
SELECT i.number, i.itinerary, i.part, i.legs, f.origin, t.destination, f.departs, t.arrives, f.date, f.departs_rank
FROM (SELECT itinerary, part, legs, CAST(row_number() OVER (ORDER BY itinerary) AS INTEGER) AS number
      FROM {itineraries}) AS i
JOIN legs AS f ON f.leg = split_part(i.legs, ' ', 1)
JOIN legs AS t ON t.leg = split_part(i.legs, ' ', -1)
"""
STATIONS = """
CREATE TABLE stations AS
SELECT station, any_value(coalesce(name, station)) AS name, any_value(latitude) AS latitude,
       any_value(longitude) AS longitude
FROM {stations} GROUP BY station
"""
DISAGREEMENTS = """
CREATE TABLE disagreements AS
SELECT i.number, i.departs_rank, c.fare_class, c.fare, c.displacement, c.contribution, c.at_stake,
       c.disagreement = 'network_only' AS by_network
FROM {connections} AS c JOIN itineraries AS i USING (part, itinerary)
WHERE c.disagreement IN ('network_only', 'leg_only')
"""
NAMED = """
SELECT i.itinerary, i.legs, i.origin, i.destination, i.date, i.departs, d.fare_class, d.fare, d.displacement,
       d.contribution, CASE WHEN d.by_network THEN 'network_only' ELSE 'leg_only' END AS disagreement, d.at_stake
FROM (SELECT * FROM disagreements WHERE {where} ORDER BY {order} {limit}) AS d
JOIN (SELECT * EXCLUDE departs_rank FROM itineraries) AS i USING (number)
ORDER BY {order}
"""
"""The millions of rows hold figures alone; names are joined to the few that a page shows."""


class GivenUpError(Exception):
    """The lists of a night were given up before they were made."""


@dataclass(frozen=True)
class _Facts:
    network: str
    currency: str


class NightIndex:
    """Lists over one night; `make` makes them, and everything else asks them.

    Parameters
    ----------
    night
        The night.
    """

    def __init__(self, night: Night) -> None:
        self.night = night
        self.name = night.name
        self._connection = duckdb.connect(":memory:")
        self._connection.execute("SET TimeZone = 'UTC'")
        self._connection.execute("SET preserve_insertion_order = false")
        self._connection.execute("SET threads = 1")
        self._given_up = False

    def make(self) -> None:
        """Make the lists, and all that pages look up again and again.

        Raises
        ------
        NightDamagedError
            If a table cannot be read.
        GivenUpError
            If it was given up meanwhile.
        """
        for statement in (LEGS, ITINERARIES, STATIONS, DISAGREEMENTS):
            self._make(statement)
        for _ in (self.facts, self.dates, self.stations):
            pass

    def give_up(self) -> None:
        """Let another thread's `make` end soon, without its lists."""
        self._given_up = True
        self._connection.interrupt()

    @cached_property
    def facts(self) -> _Facts:
        """Name and currency of the network."""
        part = self.night.parts()[0]
        try:
            found = json.loads((self.night.folder / f"part={part}" / "summary.json").read_bytes())
            return _Facts(str(found["network"]), str(found["currency"]))
        except (OSError, ValueError, KeyError) as error:
            raise NightDamagedError(f"summary.json of part {part} of night {self.name} cannot be read") from error

    @cached_property
    def dates(self) -> list[str]:
        """Local dates of departure, earliest first."""
        return [row["date"] for row in self.rows("SELECT DISTINCT date FROM legs ORDER BY date")]

    @cached_property
    def stations(self) -> dict[str, Row]:
        """Stations by name."""
        return {row["station"]: row for row in self.rows("SELECT * FROM stations ORDER BY station")}

    def rows(self, statement: str, *values: Any) -> list[Row]:
        """Answer a SELECT on ``legs``, ``itineraries``, ``stations`` or ``disagreements``."""
        try:
            found = self._connection.cursor().execute(statement, values)
            names = [column[0] for column in found.description]
            return [dict(zip(names, row, strict=True)) for row in found.fetchall()]
        except duckdb.IOException as error:
            raise self._damaged(error) from None

    def one(self, statement: str, *values: Any) -> Row | None:
        """First row of an answer, None if there is none."""
        return next(iter(self.rows(statement, *values)), None)

    def disagreements(self, where: str, values: Sequence[Any], order: str, limit: int, offset: int = 0) -> list[Row]:
        """Some disagreements with their names; condition and order are on the columns of ``disagreements``."""
        statement = NAMED.format(where=where, order=order, limit=f"LIMIT {int(limit)} OFFSET {int(offset)}")
        return self.rows(statement, *values)

    def all_disagreements(
        self, where: str, values: Sequence[Any], order: str, size: int
    ) -> Iterator[list[tuple[Any, ...]]]:
        """All of them, piece by piece, with the columns of `NAMED`."""
        found = self._connection.cursor().execute(NAMED.format(where=where, order=order, limit=""), list(values))
        while rows := found.fetchmany(size):
            yield rows

    def part_rows(self, part: str, table: str, column: str, value: str, order: str) -> list[Row]:
        """Rows of one table of one part in which a column has a value."""
        path = self.night.folder / f"part={part}" / f"{table}.parquet"
        return self.rows(
            f"SELECT * FROM read_parquet({_text(_plain(path))}) WHERE {column} = ? ORDER BY {order}", value
        )

    def _make(self, statement: str) -> None:
        tables = ("legs", "bid_prices", "comparison", "itineraries", "stations", "connections")
        sources = {table: self._source(table) for table in tables if f"{{{table}}}" in statement}
        if self._given_up:
            raise GivenUpError(self.name)
        try:
            self._connection.execute(statement.format(**sources))
        except duckdb.InterruptException:
            raise GivenUpError(self.name) from None
        except duckdb.Error as error:
            raise self._damaged(error) from None

    def _damaged(self, error: duckdb.Error) -> NightDamagedError:
        line = str(error).strip().splitlines()[0]
        return NightDamagedError(f"night {self.name} cannot be read ({line}); look with `legworth nights verify`")

    def _source(self, table: str) -> str:
        pattern = f"{_plain(self.night.folder.resolve())}/part=*/{table}.parquet"
        return (
            f"read_parquet({_text(pattern)}, hive_partitioning = true, "
            "hive_types = {'part': VARCHAR}, union_by_name = true)"
        )


def _plain(path: Path) -> str:
    """Write a path into a pattern that matches it alone."""
    return re.sub(r"([*?[])", r"[\1]", path.as_posix())


def _text(text: str) -> str:
    return "'" + text.replace("'", "''") + "'"
