"""The service follows the store's night in force, and keeps its counts, without being started again."""

from __future__ import annotations

import asyncio
import shutil
from collections.abc import Callable
from datetime import timedelta
from pathlib import Path
from typing import Any

import pytest
import structlog

from legworth.service.errors import LedgerError
from legworth.service.orders import SeatCount
from legworth.service.seats import SeatsLeft
from legworth.store import Store
from tests.legworth.service.in_process import Running, running
from tests.legworth.service.stores import AS_OF, HUB, publish
from tests.legworth.service.test_interface import problem, sold

MEND = "`legworth nights verify` says what is wrong, and `legworth nights restore` puts a sound one in force"
FIRST, SECOND, THIRD = (f"0000{number}-2027-03-01" for number in (1, 2, 3))


async def until(holds: Callable[[], Any], seconds: float = 30.0) -> None:
    """Wait for something to become true."""
    async with asyncio.timeout(seconds):
        while not holds():
            await asyncio.sleep(0.02)


async def health(service: Running) -> dict[str, Any]:
    found: dict[str, Any] = (await service.get("/v1/health")).json()
    return found


def test_a_new_night_answers_without_restart_and_a_damaged_one_never(store: Path, tmp_path: Path) -> None:
    async def check() -> None:
        async with running(store) as service:
            before = (await service.ask(itinerary="IN0", fare_class="Q")).json()
            assert before["night"] == FIRST
            await service.sell(itinerary="IN0", fare=900.0, seats=2)
            await asyncio.to_thread(publish, tmp_path / "busy", store, **{**HUB, "mean": 30.0})
            await until(lambda: service.state.night().name == SECOND)
            after = (await service.ask(itinerary="IN0", fare_class="Q")).json()
            assert after["night"] == SECOND
            assert after["displacement"] > before["displacement"]
            assert await sold(service, "IN0") == 2

            # The next night loses one byte after it has been published, and keeps its length.
            with structlog.testing.capture_logs() as lines:
                nights = Store.open(store)
                await asyncio.to_thread(_publish_and_damage, tmp_path / "damaged", store)
                await until(lambda: service.state.troubles)
                assert (await service.ask(itinerary="IN0", fare_class="Q")).json() == after
                said = await health(service)
                assert (said["status"], said["night"]) == ("in trouble", SECOND)
                assert said["troubles"] == [
                    f"the night in force, or the file that names it, is damaged; {SECOND} is served as before; {MEND}"
                ]
                await asyncio.sleep(0.3)
                nights.restore(SECOND, "tester", "the third is damaged")
                await until(lambda: not service.state.troubles)
            assert (await health(service))["status"] == "ok"
            errors = [line for line in lines if line["log_level"] == "error"]
            assert len(errors) == 1 and "SHA-256" in errors[0]["error"]

    asyncio.run(check())


def test_a_night_damaged_before_the_start_is_not_called_missing(store: Path) -> None:
    prices = store / "nights" / f"night={FIRST}" / "part=2027-03-11" / "bid_prices.parquet"
    sound = prices.read_bytes()
    prices.unlink()
    prices.write_bytes(sound[:50])

    async def check() -> None:
        async with running(store) as service:
            said = await health(service)
            assert (said["status"], said["night"], said["legs"]) == ("no sound night", None, 0)
            why = f"the night in force, or the file that names it, is damaged; no other one is served; {MEND}"
            assert said["troubles"] == [why]
            assert problem(await service.ask(itinerary="IN0", fare=900.0), 503)["detail"] == why
            assert (
                "The service is in trouble: the night in force, or the file that names it, is damaged"
                in (await service.get("/")).text
            )
            prices.write_bytes(sound)
            await until(lambda: service.state.served is not None)
            assert (await health(service))["status"] == "ok"

    asyncio.run(check())


def test_a_store_that_names_no_night_any_more_is_said_to(store: Path) -> None:
    named = (store / "in_force").read_bytes()

    async def check() -> None:
        (store / "in_force").unlink()
        async with running(store) as service:
            assert (await health(service))["status"] == "no night"
            said = problem(await service.ask(itinerary="IN0", fare=900.0), 503)["detail"]
            assert said.startswith("no night is in force, though the store holds 1 night; ")
            mark(store, named)
            await until(lambda: service.state.served is not None)
            (store / "in_force").unlink()
            await until(lambda: service.state.troubles)
            assert (await health(service))["status"] == "in trouble"
            assert (await service.ask(itinerary="IN0", fare=900.0)).status_code == 200

    asyncio.run(check())


def test_a_night_that_the_ledger_cannot_take_is_not_called_damaged(
    store: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    def broken(*_: Any) -> Any:
        raise LedgerError("the ledger could not write")

    monkeypatch.setattr(SeatsLeft, "add", broken)

    async def check() -> None:
        async with running(store) as service:
            assert (await health(service))["troubles"] == [
                "the night in force cannot be taken over; no other one is served; the log says why"
            ]

    asyncio.run(check())


def mark(store: Path, named: bytes) -> None:
    """Name the night in force, by one rename as the store does."""
    (store / "named").write_bytes(named)
    (store / "named").replace(store / "in_force")


def _publish_and_damage(network: Path, store: Path) -> None:
    """Publish a night whose prices have been changed before any service can look at it."""
    twin = network.parent / "twin"
    shutil.copytree(store, twin, ignore=shutil.ignore_patterns("seats.sqlite*"))
    publish(network, twin, **{**HUB, "mean": 12.0})
    night = Store.open(twin).night(THIRD)
    path = night.folder / "part=2027-03-11" / "bid_prices.parquet"
    data = bytearray(path.read_bytes())
    data[len(data) // 2] ^= 1
    path.unlink()
    path.write_bytes(bytes(data))
    shutil.copytree(night.folder, store / "nights" / night.folder.name)
    shutil.copy(twin / "history.jsonl", store)
    mark(store, (twin / "in_force").read_bytes())


def test_the_first_night_is_taken_over_when_it_comes(tmp_path: Path) -> None:
    Store.open(tmp_path / "store", create=True)

    async def check() -> None:
        async with running(tmp_path / "store") as service:
            assert (await health(service))["status"] == "no night"
            said = problem(await service.ask(itinerary="IN0", fare=900.0), 503)
            assert said["detail"] == "the store has no night yet; publish one with `legworth refresh`"
            problem(await service.get("/v1/legs/IN0"), 503)
            problem(await service.sell(itinerary="IN0", fare=900.0), 503)
            assert (await service.get("/v1/nights")).json() == []
            assert (await service.get("/metrics")).status_code == 200
            await asyncio.to_thread(publish, tmp_path / "hub", tmp_path / "store", **HUB)
            await until(lambda: service.state.served is not None)
            assert (await service.sell(itinerary="IN0", fare=900.0)).json()["accepted"]

    asyncio.run(check())


def test_an_old_night_is_called_old(store: Path) -> None:
    async def check() -> None:
        for hours, status in ((35, "ok"), (37, "old night")):
            async with running(store, at=AS_OF + timedelta(hours=hours)) as service:
                assert (await health(service))["status"] == status
                assert (await service.ask(itinerary="IN0", fare=900.0)).status_code == 200

    asyncio.run(check())


def test_a_restart_keeps_counts_and_answers(store: Path) -> None:
    async def check() -> None:
        async with running(store) as service:
            first = (await service.sell("k", itinerary="IN0-OUT1", fare=5_000.0, seats=20)).json()
        async with running(store) as service:
            assert await sold(service, "IN0") == 20
            assert (await service.ask(itinerary="IN0", fare=900.0)).json()["reason"] == "no_seats"
            again = (await service.sell("k", itinerary="IN0-OUT1", fare=5_000.0, seats=20)).json()
            assert again == {**first, "repeated": True}
            assert (await service.order("/v1/sales/k/cancellations", {})).json()["left"] == 0
            assert await sold(service, "OUT1") == 0

    asyncio.run(check())


def test_services_that_share_a_ledger_see_each_others_orders(store: Path, database: str) -> None:
    async def check() -> None:
        async with running(store, database=database) as one, running(store, database=database) as two:
            assert (await one.sell("k", itinerary="IN0-OUT1", fare=5_000.0, seats=20)).status_code == 401
            sale = await one.order("/v1/sales", {"itinerary": "IN0-OUT1", "fare": 5_000.0, "seats": 20}, "k", two.token)
            assert sale.json()["accepted"]
            await until(lambda: two.state.seats.left["OUT1"] == 0)
            assert (await two.ask(itinerary="OUT1", fare=900.0)).json()["reason"] == "no_seats"
            await two.count(("OUT1", 25, 20))
            await until(lambda: one.state.seats.counts["OUT1"] == SeatCount("OUT1", 25, 20))
            gone = await two.order("/v1/sales/k/cancellations", {})
            assert gone.json()["accepted"]
            await until(lambda: one.state.seats.left["IN0"] == 20)

    asyncio.run(check())


def test_a_part_that_cannot_be_read_is_no_fault_of_the_caller(store: Path) -> None:
    async def check() -> None:
        async with running(store) as service:
            night = service.state.night()
            await until(lambda: len(night.in_memory()) == 2)
            night._parts.clear()
            for path in night.night.folder.glob("part=2027-03-11/bid_prices.parquet"):
                path.unlink()
            problem(await service.ask(itinerary="IN0", fare=900.0), 503)
            assert (await service.ask(itinerary="IN0.1", fare=900.0)).status_code == 200

    asyncio.run(check())
