"""A ledger of another version is recognised and refused, an older one can be brought forward, and none is misread."""

from __future__ import annotations

import threading
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path

import pytest
from sqlalchemy import Connection, inspect, text

from legworth.service import ledger_versions
from legworth.service.errors import LedgerError
from legworth.service.ledger import Ledger
from legworth.service.ledger_tables import durable_engine, journal, metadata, overwritings, seat_counts
from legworth.service.ledger_versions import STEPS, VERSION
from legworth.service.orders import SeatCount
from tests import commands


def run(database: str, *statements: str) -> list[tuple[object, ...]]:
    """Carry out statements, as somebody would by hand; the rows of the last one."""
    engine = durable_engine(database)
    rows: list[tuple[object, ...]] = []
    with engine.begin() as connection:
        for statement in statements:
            found = connection.execute(text(statement))
            rows = [tuple(row) for row in found] if found.returns_rows else []
    engine.dispose()
    return rows


def tables(database: str) -> set[str]:
    engine = durable_engine(database)
    with engine.connect() as connection:
        found = set(inspect(connection).get_table_names())
    engine.dispose()
    return found


def made_before_the_mark(database: str) -> None:
    """A ledger as the first version made it, with a leg."""
    engine = durable_engine(database)
    metadata.create_all(engine, tables=[seat_counts, journal, overwritings])
    engine.dispose()
    run(database, "INSERT INTO seat_counts (leg, capacity, sold) VALUES ('A', 5, 2)")


def counts(database: str) -> dict[str, SeatCount]:
    ledger = Ledger(database)
    found = ledger.counts()
    ledger.close()
    return found


def test_there_is_a_step_from_every_version_to_the_next() -> None:
    assert set(STEPS) == set(range(1, VERSION))


def test_a_new_ledger_carries_its_version(database: str) -> None:
    assert counts(database) == {}
    assert run(database, "SELECT version FROM ledger_version") == [(VERSION,)]
    assert counts(database) == {}


def test_a_ledger_made_before_there_was_a_mark_works_and_is_not_written(database: str) -> None:
    made_before_the_mark(database)
    before = tables(database)
    assert counts(database) == {"A": SeatCount("A", 5, 2)}
    assert tables(database) == before
    assert "ledger_version" not in before


@pytest.mark.parametrize("forward", [False, True])
def test_a_newer_ledger_is_refused(database: str, forward: bool) -> None:
    counts(database)
    run(database, f"UPDATE ledger_version SET version = {VERSION + 1}")
    with pytest.raises(LedgerError) as error:
        Ledger.bring_forward(database) if forward else Ledger(database)
    assert str(error.value) == (
        f"the ledger is of version {VERSION + 1}, and this program knows it up to version {VERSION}; "
        "run the version of Legworth that brought it there, or a later one"
    )


def add_column(connection: Connection) -> None:
    connection.execute(text("ALTER TABLE seat_counts ADD COLUMN blocked INTEGER DEFAULT 0 NOT NULL"))


def fill_column(connection: Connection) -> None:
    connection.execute(text("UPDATE seat_counts SET blocked = 1 WHERE blocked = 0"))


def fail(connection: Connection) -> None:
    connection.execute(text("UPDATE seat_counts SET nonsense = 1"))


@pytest.mark.parametrize("marked", [False, True])
def test_an_older_ledger_is_refused_until_it_is_brought_forward(
    database: str, marked: bool, monkeypatch: pytest.MonkeyPatch
) -> None:
    made_before_the_mark(database)
    if marked:
        statement = "CREATE TABLE ledger_version (mark INTEGER PRIMARY KEY, version INTEGER NOT NULL)"
        run(database, statement, "INSERT INTO ledger_version VALUES (1, 1)")
    monkeypatch.setattr(ledger_versions, "VERSION", 3)
    monkeypatch.setattr(ledger_versions, "STEPS", {1: add_column, 2: fill_column})
    with pytest.raises(LedgerError, match=r"is of version 1, .* needs version 3; stop .*--bring-ledger-forward"):
        Ledger(database)
    assert Ledger.bring_forward(database) == (1, 3)
    assert run(database, "SELECT version FROM ledger_version") == [(3,)]
    assert run(database, "SELECT leg, sold, blocked FROM seat_counts") == [("A", 2, 1)]
    assert Ledger.bring_forward(database) == (3, 3)
    Ledger(database).close()


def test_a_step_that_fails_leaves_the_ledger_as_it_was(database: str, monkeypatch: pytest.MonkeyPatch) -> None:
    made_before_the_mark(database)
    monkeypatch.setattr(ledger_versions, "VERSION", 3)
    monkeypatch.setattr(ledger_versions, "STEPS", {1: add_column, 2: fail})
    with pytest.raises(LedgerError, match=r"cannot be brought forward .* it is as it was before"):
        Ledger.bring_forward(database)
    monkeypatch.undo()
    assert counts(database) == {"A": SeatCount("A", 5, 2)}
    assert "ledger_version" not in tables(database)
    assert run(database, "SELECT * FROM seat_counts") == [("A", 5, 2)]


def test_nothing_is_brought_forward_where_nothing_is_or_where_it_fits(database: str) -> None:
    assert Ledger.bring_forward(database) == (VERSION, VERSION)
    assert tables(database) == set()
    counts(database)
    assert Ledger.bring_forward(database) == (VERSION, VERSION)


@pytest.mark.parametrize(
    ("statements", "said"),
    [
        (["CREATE TABLE journal (day VARCHAR(10), text VARCHAR(100))"], "no table seat_counts"),
        (["ALTER TABLE journal DROP COLUMN answer"], "no column answer of table journal"),
        (["DROP TABLE overwritings"], "no table overwritings"),
        (["DELETE FROM ledger_version"], "the table ledger_version holds no version"),
    ],
)
def test_what_is_no_whole_ledger_is_refused(database: str, statements: list[str], said: str) -> None:
    if not statements[0].startswith("CREATE"):
        counts(database)
    run(database, *statements)
    before = tables(database)
    with pytest.raises(LedgerError, match=said):
        Ledger(database)
    assert tables(database) == before


def test_tables_of_others_in_the_database_do_not_matter(database: str) -> None:
    run(database, "CREATE TABLE weather (day VARCHAR(10))")
    assert counts(database) == {}
    assert tables(database) == {"weather", *metadata.tables}


def test_services_that_start_together_make_one_ledger(database: str) -> None:
    together = threading.Barrier(6)

    def start(_: int) -> dict[str, SeatCount]:
        together.wait()
        return counts(database)

    with ThreadPoolExecutor(6) as pool:
        assert list(pool.map(start, range(6))) == [{}] * 6
    assert run(database, "SELECT version FROM ledger_version") == [(VERSION,)]


@pytest.mark.parametrize("option", [[], ["--bring-ledger-forward"]])
def test_the_command_says_it_in_one_line(store: Path, option: list[str]) -> None:
    database = f"sqlite:///{store / 'seats.sqlite'}"
    counts(database)
    run(database, "UPDATE ledger_version SET version = 9")
    found = commands.run("serve", "--store", store, "--port", "0", *option)
    assert found.code == LedgerError.exit_code
    assert found.err.startswith("the ledger is of version 9")
    assert len(found.err.splitlines()) == 1
