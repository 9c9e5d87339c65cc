"""The database of the ledger: its tables, and engines whose every transaction is durable."""

from __future__ import annotations

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
    text,
)

__all__ = ["durable_engine", "journal", "metadata", "overwritings", "seat_counts"]

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


def durable_engine(url: str) -> Engine:
    """Make an engine whose every transaction is durable.

    On SQLite a transaction takes the write lock at once, unless the connection has the execution option ``reading``.
    """
    engine = create_engine(url, pool_pre_ping=True)
    if engine.dialect.name != "sqlite":
        return engine

    @event.listens_for(engine, "connect")
    def prepare(connection: Any, _record: Any) -> None:
        connection.isolation_level = None
        for pragma in ("journal_mode=WAL", "synchronous=FULL", "busy_timeout=10000", "foreign_keys=ON"):
            connection.execute(f"PRAGMA {pragma}")

    @event.listens_for(engine, "begin")
    def begin(connection: Connection) -> None:
        connection.execute(text("BEGIN" if connection.get_execution_options().get("reading") else "BEGIN IMMEDIATE"))

    return engine
