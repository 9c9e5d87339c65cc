"""A race for the last seats on shared legs, while the service is killed and started again."""

from __future__ import annotations

import asyncio
import random
import time
from collections import Counter
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any

from sqlalchemy import select

from legworth.service.ledger import Ledger
from legworth.service.ledger_tables import journal
from legworth.service.tokens import TokenFile
from tests.legworth.service.history_checker import Entry, Event, faults
from tests.legworth.service.processes import ServiceProcess
from tests.legworth.service.stores import publish
from tests.legworth.service.wire import Wire

__all__ = ["RaceResult", "run_race"]

FARE = 900.0


@dataclass(frozen=True)
class RaceResult:
    """What came of a race: faults found, and what happened."""

    faults: list[str]
    kills: int
    seconds: float
    happened: Counter[str] = field(default_factory=Counter)


def run_race(
    scratch: Path,
    database: str | None,
    *,
    clients: int,
    seconds: float,
    kills: int,
    capacity: int = 60,
    number: int = 1,
) -> RaceResult:
    """Let clients race, kill the service at random moments, and check the history against the ledger.

    Parameters
    ----------
    scratch
        Empty folder.
    database
        URL of the ledger; the store's own file if None.
    clients, seconds, kills
        How many race, how long, and how often the service is killed meanwhile.
    capacity
        Seats of every leg: few enough that all legs are soon full, and stay so while seats come back.
    number
        Seed of the random generator.
    """
    paths = publish(scratch / "network", scratch / "store", capacity=capacity, fares={"A": FARE})
    settings = scratch / "service.toml"
    settings.write_text("" if database is None else f'database = "{database}"\n')
    token = TokenFile(scratch / "store" / "tokens.json").make("racer", ["sell"])
    service = ServiceProcess(scratch / "store", settings, scratch / "service.log")
    service.start()
    url = database or f"sqlite:///{scratch / 'store' / 'seats.sqlite'}"
    try:
        return asyncio.run(_race(service, url, token, paths, clients, seconds, kills, random.Random(number)))
    finally:
        service.stop()


async def _race(
    service: ServiceProcess,
    url: str,
    token: str,
    paths: list[tuple[str, ...]],
    clients: int,
    seconds: float,
    kills: int,
    draw: random.Random,
) -> RaceResult:
    await service.listening()
    ledger = Ledger(url)
    before = ledger.counts()
    events: dict[str, Event] = {}
    happened: Counter[str] = Counter()
    begin = time.monotonic()
    until = begin + seconds

    async def end_it() -> None:
        for moment in sorted(draw.uniform(0.05, 0.95) * seconds for _ in range(kills)):
            await asyncio.sleep(max(0.0, begin + moment - time.monotonic()))
            service.kill()
            service.start()
            await service.listening()
            happened["kills"] += 1

    runners = [
        _client(f"c{place}", service.port, token, paths, until, events, happened, random.Random(draw.random()))
        for place in range(clients)
    ]
    await asyncio.gather(end_it(), *runners)
    spent = time.monotonic() - begin
    service.stop()
    with ledger.engine.connect() as connection:
        rows = connection.execute(select(journal).order_by(journal.c.number)).all()
    entries = [Entry(row.key, row.kind, tuple(row.legs.split()), row.seats, row.accepted, row.sale) for row in rows]
    found = faults(before, ledger.counts(), entries, list(events.values()))
    found += [f"key {event.key} never had an answer" for event in events.values() if event.accepted is None]
    ledger.close()
    return RaceResult(found, happened.pop("kills", 0), spent, happened)


async def _client(
    name: str,
    port: int,
    token: str,
    paths: list[tuple[str, ...]],
    until: float,
    events: dict[str, Event],
    happened: Counter[str],
    draw: random.Random,
) -> None:
    """Sell and cancel until the time is over; an order is sent again under its key until it has an answer."""
    held: list[Event] = []
    async with Wire(port, {"Authorization": f"Bearer {token}"}) as wire:
        step = 0
        while time.monotonic() < until:
            step += 1
            key = f"{name}-{step}"
            if held and draw.random() < 0.45:
                sale = held.pop(draw.randrange(len(held)))
                event = Event(key, "cancellation", sale.legs, sale.seats, None, sale.key)
                path, body = f"/v1/sales/{sale.key}/cancellations", {"seats": sale.seats}
            else:
                legs = draw.choice(paths)
                event = Event(key, "sale", legs, draw.randint(1, 4), None)
                path, body = "/v1/sales", {"legs": list(legs), "fare": FARE, "seats": event.seats}
            events[key] = event
            answer = await _insist(wire, path, body, key, happened, draw)
            events[key] = event = replace(event, accepted=bool(answer["accepted"]))
            happened[f"{event.kind} {'accepted' if event.accepted else 'refused'}"] += 1
            if answer["repeated"]:
                happened["answered from the journal"] += 1
            if event.kind == "sale" and event.accepted:
                held.append(event)


async def _insist(
    wire: Wire, path: str, body: dict[str, Any], key: str, happened: Counter[str], draw: random.Random
) -> dict[str, Any]:
    """Send an order until it is answered; now and then send it once more for nothing."""
    while True:
        try:
            status, answer = await wire.json("POST", path, body, {"Idempotency-Key": key})
        except (OSError, EOFError, ValueError):
            happened["connections lost"] += 1
            await asyncio.sleep(0.05 + 0.1 * draw.random())
            continue
        if status == 503:
            happened["asked to come again"] += 1
            await asyncio.sleep(0.05)
            continue
        if status != 200:
            raise AssertionError(f"{status} {answer}")
        if draw.random() < 0.03:
            happened["sent twice"] += 1
            draw_again = await _insist(wire, path, body, key, happened, random.Random(0))
            if {**draw_again, "repeated": None} != {**answer, "repeated": None}:
                raise AssertionError(f"the same key was answered differently: {answer}, {draw_again}")
        return dict(answer)
