"""The database of the ledger: its tables, and engines whose every transaction is durable."""

from __future__ import annotations

import sqlite3
import time
from typing import Any

from sqlalchemy import (
    Boolean,
    CheckConstraint,
    Column,
    Connection,
    Engine,
    Integer,
    MetaData,
    String,
    Table,
    Text,
    create_engine,
    event,
    make_url,
    text,
)

from network import SettingError

__all__ = ["durable_engine", "journal", "ledger_version", "metadata", "overwritings", "seat_counts"]

metadata = MetaData()
seat_counts = Table(
    "seat_counts",
    metadata,
    Column("leg", String(200), primary_key=True),
    Column("capacity", Integer, CheckConstraint("capacity >= 0"), nullable=False),
    Column("sold", Integer, CheckConstraint("sold >= 0"), nullable=False),
)
journal = Table(
    "journal",
    metadata,
    Column("number", Integer, primary_key=True, autoincrement=True),
    Column("key", String(200), unique=True, nullable=False),
    Column("kind", String(20), nullable=False),
    Column("sale", String(200), index=True),
    Column("legs", Text, nullable=False),
    Column("seats", Integer, CheckConstraint("seats >= 0"), nullable=False),
    Column("accepted", Boolean, nullable=False),
    Column("digest", String(64), nullable=False),
    Column("answer", Text, nullable=False),
    Column("who", String(200), nullable=False),
    Column("at_any_price", Boolean, nullable=False),
    Column("at", String(40), nullable=False),
)
overwritings = Table(
    "overwritings",
    metadata,
    Column("number", Integer, primary_key=True, autoincrement=True),
    Column("leg", String(200), nullable=False, index=True),
    Column("capacity_before", Integer),
    Column("sold_before", Integer),
    Column("capacity", Integer, nullable=False),
    Column("sold", Integer, nullable=False),
    Column("who", String(200), nullable=False),
    Column("why", Text, nullable=False),
    Column("at", String(40), nullable=False),
)
ledger_version = Table(
    "ledger_version",
    metadata,
    Column("mark", Integer, CheckConstraint("mark = 1"), primary_key=True, autoincrement=False),
    Column("version", Integer, CheckConstraint("version > 0"), nullable=False),
)


PATIENCE = 5.0
"""Seconds that a transaction waits for a lock, and a connection for the server, before the order is given back."""
LONGEST = 60.0
"""Seconds that a statement may take."""


def durable_engine(url: str) -> Engine:
    """Make an engine whose every transaction is durable, and waits for nobody without end.

    On SQLite a transaction takes the write lock at once, unless the connection has the execution option ``reading``.

    Raises
    ------
    SettingError
        If the URL names neither SQLite nor PostgreSQL, or a database in memory.
    """
    parsed = make_url(url)
    kind = parsed.get_backend_name()
    if kind not in {"sqlite", "postgresql"}:
        raise SettingError(f"the ledger is kept in SQLite or PostgreSQL, not in {kind!r}; correct the database URL")
    if kind == "sqlite" and parsed.database in {None, "", ":memory:"}:
        raise SettingError("a ledger in memory would be lost; name a file in the database URL")
    if kind == "sqlite":
        engine = create_engine(parsed)
        event.listen(engine, "connect", _prepare_sqlite)
        event.listen(engine, "begin", _begin_sqlite)
    else:
        engine = create_engine(parsed, pool_pre_ping=True, connect_args={"connect_timeout": max(2, int(PATIENCE))})
        event.listen(engine, "connect", _prepare_postgresql)
    return engine


def _prepare_sqlite(connection: Any, _record: Any) -> None:
    connection.isolation_level = None
    connection.execute(f"PRAGMA busy_timeout={PATIENCE * 1000:.0f}")
    _write_ahead(connection)
    for pragma in ("synchronous=FULL", "foreign_keys=ON"):
        connection.execute(f"PRAGMA {pragma}")


def _write_ahead(connection: Any) -> None:
    """Keep a write-ahead log; SQLite does not wait by itself where several services begin one at the same time."""
    most = time.monotonic() + PATIENCE
    while True:
        try:
            connection.execute("PRAGMA journal_mode=WAL")
            return
        except sqlite3.OperationalError as error:
            if error.sqlite_errorcode & 0xFF != sqlite3.SQLITE_BUSY or time.monotonic() > most:
                raise
            time.sleep(0.01)


def _begin_sqlite(connection: Connection) -> None:
    connection.execute(text("BEGIN" if connection.get_execution_options().get("reading") else "BEGIN IMMEDIATE"))


def _prepare_postgresql(connection: Any, _record: Any) -> None:
    with connection.cursor() as cursor:
        cursor.execute("SET synchronous_commit = on")
        cursor.execute(f"SET lock_timeout = {PATIENCE * 1000:.0f}")
        cursor.execute(f"SET statement_timeout = {LONGEST * 1000:.0f}")
    connection.commit()
