"""Products of two nights joined by DuckDB, over the files of the parts that changed alone.

Parts whose ``connections`` are last night's own file cannot differ and are not read. The others are joined some at a
time, so that memory stays bounded whatever the size of a night. Products are matched by itinerary and fare class within
the parts of one name first; those left over on either side are matched across parts, since a new overnight connection
may have tied two parts into one.
"""

from __future__ import annotations

import tempfile
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from typing import Any

import duckdb

from legworth.refresh.changes_legs import NightLegs
from legworth.refresh.changes_nights import NightTables, same_parts, table_files

__all__ = ["ProductBase", "joined_products"]

TOGETHER = 24
"""Parts joined at a time."""

COLUMNS = "part, itinerary, fare_class, fare, displacement, contribution, open, disagreement, at_stake"
PLAIN = """part VARCHAR, itinerary VARCHAR, fare_class VARCHAR, fare DOUBLE, displacement DOUBLE, contribution DOUBLE,
    open BOOLEAN, disagreement VARCHAR, at_stake DOUBLE"""
TABLES = f"""
CREATE TEMP TABLE only_tonight ({PLAIN});
CREATE TEMP TABLE only_last ({PLAIN});
CREATE TEMP TABLE touched (
    part VARCHAR, itinerary VARCHAR, fare_class VARCHAR, fare DOUBLE, fare_then DOUBLE, displacement DOUBLE,
    displacement_then DOUBLE, contribution DOUBLE, contribution_then DOUBLE, open BOOLEAN, open_then BOOLEAN,
    disagreement VARCHAR, disagreement_then VARCHAR, at_stake DOUBLE, at_stake_then DOUBLE
);
CREATE TEMP TABLE moved (
    part VARCHAR, itinerary VARCHAR, fare_class VARCHAR, fare DOUBLE, fare_then DOUBLE, displacement DOUBLE,
    displacement_then DOUBLE, contribution DOUBLE, contribution_then DOUBLE, open BOOLEAN, open_then BOOLEAN,
    disagreement VARCHAR, disagreement_then VARCHAR, at_stake DOUBLE, at_stake_then DOUBLE,
    legs VARCHAR, seats BIGINT, seats_then BIGINT, passengers DOUBLE
);
"""
BOTH = """n.part, n.itinerary, n.fare_class, n.fare, b.fare, n.displacement, b.displacement, n.contribution,
    b.contribution, n.open, b.open, n.disagreement, b.disagreement, n.at_stake, b.at_stake"""
DIFFERS = "(n.open <> b.open OR n.disagreement IS DISTINCT FROM b.disagreement)"
MOVED = """
INSERT INTO moved
WITH keys AS (SELECT DISTINCT part, itinerary FROM touched),
steps AS (
    SELECT i.part, i.itinerary, i.legs, unnest(string_split(i.legs, ' ')) AS leg
    FROM {itineraries} i SEMI JOIN keys USING (part, itinerary)
),
paths AS (
    SELECT s.part, s.itinerary, any_value(s.legs) AS legs, min(n.remaining) AS seats,
        coalesce(min(b.remaining), 0) AS seats_then, bool_or(n.departed) AS departed
    FROM steps s JOIN legs_tonight n USING (leg) LEFT JOIN legs_last b USING (leg)
    GROUP BY s.part, s.itinerary
),
asked AS (
    SELECT d.part, d.itinerary, d.fare_class, d.mean
    FROM {demand} d SEMI JOIN touched USING (part, itinerary, fare_class)
)
SELECT t.*, p.legs, p.seats, p.seats_then,
    least(coalesce(a.mean, 0), CASE WHEN t.open THEN p.seats ELSE p.seats_then END) AS passengers
FROM touched t JOIN paths p USING (part, itinerary) LEFT JOIN asked a USING (part, itinerary, fare_class)
WHERE NOT p.departed
"""


@dataclass(frozen=True)
class ProductBase:
    """Products of two nights in a database.

    Its table ``moved`` holds the products on sale both nights, on paths that have not departed, that one night sells
    and the other does not or that are disputed differently: both nights' figures of ``connections``, the legs of the
    path, the seats left on it, and the passengers expected, which is mean demand to come, at most the seats of the
    night that sells it. ``only_tonight`` and ``only_last`` hold the products of one night alone.

    Attributes
    ----------
    base
        The database.
    tonight, last
        The nights.
    changed, changed_last
        Parts that were joined.
    fares_changed
        Products on sale both nights with another fare.
    """

    base: duckdb.DuckDBPyConnection
    tonight: NightTables
    last: NightTables | None
    changed: tuple[str, ...]
    changed_last: tuple[str, ...]
    fares_changed: int

    def rows(self, query: str) -> list[tuple[Any, ...]]:
        """Rows of a query."""
        return self.base.execute(query).fetchall()

    def row(self, query: str) -> tuple[Any, ...]:
        """Return the only row of a query."""
        return self.rows(query)[0]

    def files(self, night: NightTables, table: str, parts: Sequence[str]) -> str:
        """SQL that reads a table of some parts, its column ``part`` taken from the names of the folders."""
        return _files(night, table, parts)


@contextmanager
def joined_products(
    tonight: NightTables,
    last: NightTables | None,
    legs: NightLegs,
    legs_last: NightLegs | None,
    *,
    memory: str,
    threads: int,
) -> Iterator[ProductBase]:
    """Join the products of two nights; without last night nothing is joined.

    Parameters
    ----------
    tonight, last
        The nights.
    legs, legs_last
        Their legs.
    memory, threads
        What DuckDB may take; what does not fit goes to a temporary folder.
    """
    with tempfile.TemporaryDirectory(prefix="legworth-changes-") as spill:
        settings: dict[str, Any] = {"memory_limit": memory, "threads": threads, "temp_directory": spill}
        base = duckdb.connect(config={**settings, "preserve_insertion_order": False})
        try:
            base.execute(TABLES)
            if last is None or legs_last is None:
                yield ProductBase(base, tonight, None, (), (), 0)
                return
            base.register("legs_tonight", legs.as_table())
            base.register("legs_last", legs_last.as_table())
            same = same_parts(tonight, last, "connections")
            changed, changed_last = (tuple(p for p in night.parts() if p not in same) for night in (tonight, last))
            fares_changed = _join(base, (tonight, changed), (last, changed_last))
            yield ProductBase(base, tonight, last, changed, changed_last, fares_changed)
        finally:
            base.close()


def _join(
    base: duckdb.DuckDBPyConnection,
    tonight: tuple[NightTables, Sequence[str]],
    last: tuple[NightTables, Sequence[str]],
) -> int:
    """Fill ``moved``, ``only_tonight`` and ``only_last``; return how many products have another fare."""
    names = sorted({*tonight[1], *last[1]})
    fares_changed = 0
    for first in range(0, len(names), TOGETHER):
        chosen = set(names[first : first + TOGETHER])
        for table, (night, parts) in (("n", tonight), ("b", last)):
            rows = _files(night, "connections", [part for part in parts if part in chosen])
            base.execute(f"CREATE OR REPLACE TEMP TABLE {table} AS SELECT {COLUMNS} FROM {rows}")
        fares_changed += _match(base, "n.part = b.part AND")
        _place(base, tonight[0])
    base.execute("CREATE OR REPLACE TEMP TABLE n AS FROM only_tonight")
    base.execute("CREATE OR REPLACE TEMP TABLE b AS FROM only_last")
    base.execute("DELETE FROM only_tonight")
    base.execute("DELETE FROM only_last")
    fares_changed += _match(base, "")
    _place(base, tonight[0])
    return fares_changed


def _match(base: duckdb.DuckDBPyConnection, where: str) -> int:
    """Match the tables ``n`` and ``b``; return how many products have another fare."""
    on = f"{where} n.itinerary = b.itinerary AND n.fare_class = b.fare_class"
    base.execute(f"INSERT INTO touched SELECT {BOTH} FROM n JOIN b ON {on} WHERE {DIFFERS}")
    counts = f"SELECT count(*), count(*) FILTER (n.fare <> b.fare) FROM n JOIN b ON {on}"
    matched, fares_changed = base.execute(counts).fetchall()[0]
    for table, one, other in (("only_tonight", "n", "b"), ("only_last", "b", "n")):
        if base.execute(f"SELECT count(*) FROM {one}").fetchall()[0][0] > matched:
            base.execute(f"INSERT INTO {table} SELECT {COLUMNS} FROM {one} ANTI JOIN {other} ON {on}")
    return int(fares_changed)


def _place(base: duckdb.DuckDBPyConnection, tonight: NightTables) -> None:
    """Move the products in ``touched`` to ``moved``, with their paths, seats and demand."""
    parts = [str(row[0]) for row in base.execute("SELECT DISTINCT part FROM touched").fetchall()]
    if parts:
        files = {table: _files(tonight, table, parts) for table in ("itineraries", "demand")}
        base.execute(MOVED.format(**files))
        base.execute("DELETE FROM touched")


def _files(night: NightTables, table: str, parts: Sequence[str]) -> str:
    paths = ["'" + str(path).replace("'", "''") + "'" for path in table_files(night, table, parts)]
    if not paths:
        return "(FROM only_tonight LIMIT 0)"
    return f"read_parquet([{', '.join(paths)}], hive_partitioning = true, hive_types_autocast = false)"
