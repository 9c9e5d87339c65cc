"""A ledger that is locked, full or out of reach: orders are turned away, nothing is lost, and the service recovers."""

from __future__ import annotations

import asyncio
import sqlite3
from pathlib import Path

import psycopg
import pytest
from sqlalchemy import event

from tests.legworth.service.in_process import Running, running
from tests.legworth.service.test_following import health, until
from tests.legworth.service.test_interface import problem, sold

ORDER = {"itinerary": "IN0", "fare": 900.0}


async def turned_away(service: Running, key: str) -> None:
    answer = await service.sell(key, **ORDER)
    assert problem(answer, 503)["detail"].endswith("send the order again under the same key")
    assert answer.headers["retry-after"] == "1"


async def carried_out(service: Running, key: str, seats: int) -> None:
    """The order that was turned away is carried out when it comes again, once."""
    for repeated in (False, True):
        answer = await service.sell(key, **ORDER)
        assert answer.status_code == 200, answer.text
        assert (answer.json()["accepted"], answer.json()["repeated"]) == (True, repeated)
    assert await sold(service, "IN0") == seats


def test_a_locked_ledger(store: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("legworth.service.ledger_tables.PATIENCE", 0.2)

    async def check() -> None:
        async with running(store) as service:
            other = sqlite3.connect(store / "seats.sqlite", isolation_level=None)
            other.execute("BEGIN IMMEDIATE")
            await turned_away(service, "k")
            assert (await service.ask(**ORDER)).status_code == 200
            other.execute("ROLLBACK")
            other.close()
            await carried_out(service, "k", 1)

    asyncio.run(check())


def test_a_full_disk(store: Path) -> None:
    async def check() -> None:
        async with running(store) as service:
            engine = service.state.ledger.engine

            def narrow(connection: sqlite3.Connection, _record: object) -> None:
                pages = connection.execute("PRAGMA page_count").fetchone()[0]
                connection.execute(f"PRAGMA max_page_count = {pages}")

            event.listen(engine, "connect", narrow)
            engine.dispose()
            answers = []
            for number in range(200):
                answers.append(await service.sell(f"fill-{number}", **ORDER, at_any_price=True))
                if answers[-1].status_code == 503:
                    break
            await turned_away(service, f"fill-{len(answers) - 1}")
            accepted = sum(answer.status_code == 200 and answer.json()["accepted"] for answer in answers)
            assert await sold(service, "IN0") == accepted == service.state.ledger.counts()["IN0"].sold
            event.remove(engine, "connect", narrow)
            engine.dispose()
            again = (await service.sell(f"fill-{len(answers) - 1}", **ORDER, at_any_price=True)).json()
            assert not again["repeated"]

    asyncio.run(check())


def test_a_database_out_of_reach(store: Path, postgres_server: str) -> None:
    address = postgres_server.replace("+psycopg", "")
    name = "seats_out_of_reach"

    def command(*statements: str) -> None:
        with psycopg.connect(f"{address}/postgres", autocommit=True) as connection:
            for statement in statements:
                connection.execute(statement)  # type: ignore[call-overload]

    command(f"CREATE DATABASE {name}")
    away = "SELECT pg_terminate_backend(pid) FROM pg_stat_activity WHERE datname = "

    async def check() -> None:
        async with running(store, database=f"{postgres_server}/{name}") as service:
            await carried_out(service, "before", 1)
            command(f"ALTER DATABASE {name} ALLOW_CONNECTIONS false", f"{away} '{name}'")
            await turned_away(service, "k")
            await until(lambda: service.state.troubles)
            said = await health(service)
            assert said["status"] == "in trouble" and said["troubles"][0].startswith("the ledger cannot be read")
            assert (await service.ask(**ORDER)).status_code == 200
            command(f"ALTER DATABASE {name} ALLOW_CONNECTIONS true")
            await carried_out(service, "k", 2)
            await until(lambda: not service.state.troubles)
            command(f"{away} '{name}'")
            await carried_out(service, "once-more", 3)

    asyncio.run(check())


def test_a_row_that_somebody_else_holds(store: Path, postgres_server: str, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("legworth.service.ledger_tables.PATIENCE", 0.2)
    address = postgres_server.replace("+psycopg", "")
    with psycopg.connect(f"{address}/postgres", autocommit=True) as connection:
        connection.execute("CREATE DATABASE seats_held")

    async def check() -> None:
        async with running(store, database=f"{postgres_server}/seats_held") as service:
            with psycopg.connect(f"{address}/seats_held") as other:
                other.execute("SELECT * FROM seat_counts WHERE leg = 'IN0' FOR UPDATE")
                await turned_away(service, "k")
                other.rollback()
            await carried_out(service, "k", 1)

    asyncio.run(check())
