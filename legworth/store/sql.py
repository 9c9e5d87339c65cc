"""All nights at once, in DuckDB: a view per table, pruned by night and part, and what the manifests say.

A night is a Hive partition ``night=NAME`` and a part one ``part=PART``: a condition on either reads no file of the
others. The connection reads the files of nights and nothing else, and writes nothing.
"""

from __future__ import annotations

import re
from collections.abc import Iterable, Sequence
from datetime import UTC
from pathlib import Path
from typing import TYPE_CHECKING, Any

import duckdb
import pyarrow as pa

from legworth.store.advice import no_night_in_force
from legworth.store.night import Night
from network.errors import NightDamagedError, StoreError

if TYPE_CHECKING:
    from legworth.store.store import Store

__all__ = ["connect", "damage_met", "query"]

TONIGHT = "tonight_"
NIGHTS = pa.schema(
    {
        "night": pa.string(),
        "number": pa.int64(),
        "as_of": pa.timestamp("us", "UTC"),
        "published": pa.timestamp("us", "UTC"),
        "before": pa.string(),
        "in_force": pa.bool_(),
        "parts": pa.int64(),
        "parts_taken_over": pa.int64(),
        "legs": pa.int64(),
        "itineraries": pa.int64(),
        "products": pa.int64(),
        "objective": pa.float64(),
        "seconds": pa.float64(),
        "bytes": pa.int64(),
        "forced_by": pa.string(),
        "forced_because": pa.string(),
    }
)
PARTS = pa.schema(
    {
        "night": pa.string(),
        "part": pa.string(),
        "legs": pa.int64(),
        "itineraries": pa.int64(),
        "products": pa.int64(),
        "objective": pa.float64(),
        "taken_over_from": pa.string(),
        "seconds": pa.float64(),
        "certified": pa.bool_(),
    }
)


def connect(
    store: Store, tables: Iterable[str] | None = None, nights: Sequence[Night] | None = None
) -> duckdb.DuckDBPyConnection:
    """Open a connection with these views.

    - one per table, over all nights that have a readable manifest: ``night``, ``part``, then the table's columns;
    - ``tonight_TABLE``, the same of the night in force alone;
    - ``nights`` and ``parts``, from the manifests: one row a night, one row a part of a night.

    Parameters
    ----------
    store
        The store; the connection knows the nights that it holds now.
    tables
        Names of the views to make, all if None; names unknown are passed over. Each takes a moment in a large store.
    nights
        Its nights, where the caller holds them already.

    Raises
    ------
    StoreError
        If the store cannot be read.
    """
    nights = [night for night in (store.nights() if nights is None else nights) if _readable(night)]
    try:
        mark = store.in_force()
    except NightDamagedError:
        mark = None
    views = {
        table: [night for night in nights if table in night.manifest.columns]
        for table in sorted({table for night in nights for table in night.manifest.columns})
    }
    if mark is not None:
        views |= {f"{TONIGHT}{table}": [mark] for table in mark.manifest.columns}
    wanted = None if tables is None else set(tables)
    connection = duckdb.connect(":memory:")
    connection.execute("SET TimeZone = 'UTC'")
    connection.register("nights", _nights(nights, None if mark is None else mark.name))
    connection.register("parts", _parts(nights))
    for view, holders in views.items():
        if wanted is None or view in wanted:
            _make_view(connection, view, _select(view.removeprefix(TONIGHT), holders))
    folder = (store.path / "nights").resolve()
    connection.execute(f"SET allowed_directories = [{_text(folder.as_posix())}, {_text(_plain(folder))}]")
    connection.execute("SET enable_external_access = false")
    connection.execute("SET lock_configuration = true")
    return connection


def query(store: Store, statement: str, nights: Sequence[Night] | None = None) -> pa.Table:
    """Answer one SELECT on the views of `connect`, which takes the nights likewise.

    Raises
    ------
    StoreError
        If the statement is no single SELECT, or DuckDB cannot answer it.
    NightDamagedError
        If that is because a night that it asks about is damaged.
    """
    nights = store.nights() if nights is None else nights
    with connect(store, re.findall(r"\w+", statement), nights) as connection:
        try:
            statements = connection.extract_statements(statement)
            if len(statements) != 1 or statements[0].type != duckdb.StatementType.SELECT:
                raise StoreError("the store answers one SELECT statement at a time and is never changed by one")
            return connection.execute(statements[0]).to_arrow_table()
        except duckdb.Error as error:
            raise _no_answer(store, statement, nights, error) from None


def damage_met(nights: Iterable[Night], statement: str) -> tuple[str, ...]:
    """Say which nights a statement leaves out, and which tables that it names have lost files or part of them.

    One line a fault. What changed without changing its length is only found by reading it: see `Night.verify`.
    """
    tables = {word.removeprefix(TONIGHT) for word in re.findall(r"\w+", statement)}
    lines = []
    for night in nights:
        faults = night.quick_faults(tables)
        more = f" and {len(faults) - 1:,} more" if len(faults) > 1 else ""
        if not _readable(night):
            lines.append(f"night {night.name} is damaged and left out: {faults[0]}")
        elif faults:
            lines.append(f"night {night.name} is damaged: {faults[0]}{more}")
    return tuple(lines)


def _no_answer(store: Store, statement: str, nights: Iterable[Night], error: duckdb.Error) -> StoreError:
    """Say why a statement has no answer; damage comes before whatever else DuckDB says."""
    if any(word.startswith(TONIGHT) for word in re.findall(r"\w+", statement)):
        try:
            if store.in_force() is None:
                return no_night_in_force(store)
        except NightDamagedError as damaged:
            return damaged
    if not isinstance(error, duckdb.ParserException | duckdb.BinderException | duckdb.CatalogException):
        damage = damage_met(nights, statement)
        if damage:
            mend = (
                "see what is sound with `legworth nights verify`, and ask about sound nights alone (WHERE night = ...)"
            )
            return NightDamagedError(f"the query cannot be answered: {damage[0]}; {mend}")
    return StoreError(f"the query cannot be answered: {_line(error)}{_perhaps_damaged(error)}")


def _perhaps_damaged(error: duckdb.Error) -> str:
    """Where to look when the fault may be that of a file."""
    kinds = (duckdb.IOException, duckdb.InvalidInputException, duckdb.SerializationException, duckdb.InternalException)
    if type(error) is not duckdb.Error and not isinstance(error, kinds):
        return ""
    return "; if the statement is right, a file may be damaged: look with `legworth nights verify`"


def _make_view(connection: duckdb.DuckDBPyConnection, view: str, select: str) -> None:
    try:
        connection.execute(f"CREATE VIEW {_name(view)} AS {select}")
    except duckdb.Error as error:
        raise StoreError(f"{view} cannot be read ({_line(error)}); look with `legworth nights verify`") from None


def _line(error: duckdb.Error) -> str:
    return str(error).strip().splitlines()[0].rstrip(": ")


def _readable(night: Night) -> bool:
    try:
        return bool(night.manifest)
    except NightDamagedError:
        return False


def _select(table: str, nights: Iterable[Night]) -> str:
    """SELECT of a table over nights, one branch for nights whose columns are the same.

    DuckDB looks at the first file for its types, whatever nights are asked about: that of the latest night that has
    lost nothing of the table, which is the least likely to be gone.
    """
    columns: dict[str, None] = {}
    groups: dict[tuple[bool, tuple[tuple[str, str], ...]], list[Night]] = {}
    for night in nights:
        declared = night.manifest.columns[table]
        columns |= dict.fromkeys(declared)
        groups.setdefault((table in night.manifest.mixed, tuple(declared.items())), []).append(night)
    branches = []
    for (mixed, declared_pairs), members in groups.items():
        known = dict(declared_pairs)
        chosen = [_name(column) if column in known else f"NULL AS {_name(column)}" for column in columns]
        files = ", ".join(
            _text(f"{_plain(night.folder.resolve())}/part=*/{table}.parquet")
            for night in sorted(members, key=lambda night: (bool(night.quick_faults({table})), -night.number))
        )
        branches.append(
            f"SELECT {', '.join(['night', 'part', *chosen])} FROM read_parquet([{files}], "
            f"hive_partitioning = true, hive_types = {{'night': VARCHAR, 'part': VARCHAR}}, union_by_name = {mixed})"
        )
    return " UNION ALL ".join(branches)


def _plain(path: Path) -> str:
    """Write a path into a pattern that matches it alone."""
    return re.sub(r"([*?[])", r"[\1]", path.as_posix())


def _name(name: str) -> str:
    return '"' + name.replace('"', '""') + '"'


def _text(text: Path | str) -> str:
    return "'" + str(text).replace("'", "''") + "'"


def _nights(nights: Iterable[Night], in_force: str | None) -> pa.Table:
    rows: list[dict[str, Any]] = []
    for night in nights:
        manifest = night.manifest
        objectives = [part.objective for part in manifest.parts if part.objective is not None]
        rows.append(
            {
                "night": night.name,
                "number": night.number,
                # In UTC: pyarrow passes over the offset of some kinds of time zone.
                "as_of": manifest.as_of.astimezone(UTC),
                "published": manifest.published and manifest.published.astimezone(UTC),
                "before": manifest.before,
                "in_force": night.name == in_force,
                "parts": len(manifest.parts),
                "parts_taken_over": sum(part.taken_over_from is not None for part in manifest.parts),
                "legs": sum(part.legs for part in manifest.parts),
                "itineraries": sum(part.itineraries for part in manifest.parts),
                "products": sum(part.products for part in manifest.parts),
                "objective": sum(objectives) if len(objectives) == len(manifest.parts) else None,
                "seconds": sum(manifest.seconds.values()),
                "bytes": sum(entry.bytes for entry in manifest.files.values()),
                "forced_by": manifest.forced and manifest.forced.who,
                "forced_because": manifest.forced and manifest.forced.reason,
            }
        )
    return pa.Table.from_pylist(rows, NIGHTS)


def _parts(nights: Iterable[Night]) -> pa.Table:
    rows = [
        {
            "night": night.name,
            "part": part.name,
            "legs": part.legs,
            "itineraries": part.itineraries,
            "products": part.products,
            "objective": part.objective,
            "taken_over_from": part.taken_over_from,
            "seconds": sum(part.seconds.values()),
            "certified": part.certified,
        }
        for night in nights
        for part in night.manifest.parts
    ]
    return pa.Table.from_pylist(rows, PARTS)
