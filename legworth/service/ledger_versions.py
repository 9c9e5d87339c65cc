"""Versions of the ledger's tables: a ledger of another version is told by its mark and refused, never misread.

The mark is the one row of ``ledger_version``, made together with the tables. A ledger without it was made before there
was a mark, and is of version 1. Whoever changes a table of the ledger adds one to `VERSION` and writes the step that
brings a ledger of the version before forward.
"""

from __future__ import annotations

from collections.abc import Callable

from sqlalchemy import Connection, Engine, insert, inspect, select, update
from sqlalchemy.exc import IntegrityError, ProgrammingError, SQLAlchemyError

from legworth.service.errors import LedgerError
from legworth.service.ledger_tables import ledger_version, metadata

__all__ = ["STEPS", "VERSION", "bring_forward", "make_ready"]

VERSION = 1
"""Version of the tables that this program reads and writes."""
FIRST = 1
"""Version of a ledger without a mark."""
STEPS: dict[int, Callable[[Connection], None]] = {}
"""Step n makes a ledger of version n one of version n + 1, in the transaction given; it writes no mark."""


def make_ready(engine: Engine) -> None:
    """Make the tables of an empty ledger, and see that those of any other are of this version.

    A ledger that is there already is not written.

    Raises
    ------
    LedgerError
        If the ledger is of another version, or its tables are not those of a ledger.
    SQLAlchemyError
        If the database cannot be reached or written.
    """
    if _version_now(engine) is None:
        try:
            with engine.begin() as connection:
                if _version_of(connection) is None:
                    _make(connection)
        except (IntegrityError, ProgrammingError):
            # Another service that starts at the same time may have been quicker; otherwise it is a trouble of its own.
            if _version_now(engine) is None:
                raise
    _see_that_it_fits(_version_now(engine))
    with engine.connect().execution_options(reading=True) as connection:
        _see_that_it_is_whole(connection)


def bring_forward(engine: Engine) -> tuple[int, int]:
    """Bring an older ledger forward to this version, all of it in one transaction; one of this version stays as it is.

    No service may use the ledger meanwhile.

    Returns
    -------
    tuple of int
        Its version before and now.

    Raises
    ------
    LedgerError
        If the ledger is newer, or a step fails; it then is as it was before.
    """
    try:
        with engine.begin() as connection:
            before = _version_of(connection)
            if before is None:
                return VERSION, VERSION
            if before > VERSION:
                _see_that_it_fits(before)
            for version in range(before, VERSION):
                STEPS[version](connection)
            if before < VERSION:
                _mark(connection)
        return before, VERSION
    except SQLAlchemyError as error:
        line = str(error).strip().splitlines()[0]
        raise LedgerError(f"the ledger cannot be brought forward ({line}); it is as it was before") from error


def _version_now(engine: Engine) -> int | None:
    with engine.connect().execution_options(reading=True) as connection:
        return _version_of(connection)


def _version_of(connection: Connection) -> int | None:
    """Version of a ledger; None if there is none."""
    names = set(inspect(connection).get_table_names())
    if ledger_version.name in names:
        return connection.scalar(select(ledger_version.c.version)) or 0
    return FIRST if names & set(metadata.tables) else None


def _make(connection: Connection) -> None:
    metadata.create_all(connection, checkfirst=False)
    connection.execute(insert(ledger_version), {"mark": 1, "version": VERSION})


def _mark(connection: Connection) -> None:
    ledger_version.create(connection, checkfirst=True)
    if not connection.execute(update(ledger_version).values(version=VERSION)).rowcount:
        connection.execute(insert(ledger_version), {"mark": 1, "version": VERSION})


def _see_that_it_fits(version: int | None) -> None:
    if version is None or version < FIRST:
        raise LedgerError(
            "the table ledger_version holds no version, so that nobody can tell how to read the ledger; "
            "put the copy of the database back that was made last"
        )
    if version > VERSION:
        raise LedgerError(
            f"the ledger is of version {version}, and this program knows it up to version {VERSION}; "
            "run the version of Legworth that brought it there, or a later one"
        )
    if version < VERSION:
        raise LedgerError(
            f"the ledger is of version {version}, and this program needs version {VERSION}; stop every service that "
            "uses it, back the database up, and start once with legworth serve --bring-ledger-forward"
        )


def _see_that_it_is_whole(connection: Connection) -> None:
    """See that all tables and columns are there, whoever made them."""
    there = inspect(connection)
    names = set(there.get_table_names())
    for name, table in metadata.tables.items():
        if name == ledger_version.name:
            continue
        columns = {column["name"] for column in there.get_columns(name)} if name in names else set()
        missing = [column.name for column in table.columns if column.name not in columns]
        if missing:
            what = f"column {missing[0]} of table {name}" if name in names else f"table {name}"
            raise LedgerError(
                f"the database has no {what}, so that it is no whole ledger; name an empty database, or put back the "
                "copy that was made last"
            )
