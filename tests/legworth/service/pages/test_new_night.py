"""A night that is taken over while planners look: requests go by it at once, pages as soon as its lists are made."""

from __future__ import annotations

import asyncio
import os
import shutil
import sys
import threading
import time
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import httpx
import pytest
import structlog

from legworth.service.pages import night_index, preparing
from legworth.service.pages.night_index import NightIndex
from legworth.service.pages.preparing import NICENESS, Preparation
from legworth.service.served_night import ServedNight
from legworth.store import Store
from network.errors import NightDamagedError
from tests.legworth.service.in_process import Running, running
from tests.legworth.service.pages.reading import check_page
from tests.legworth.service.stores import HUB, publish

FIRST, SECOND = (f"0000{number}-2027-03-01" for number in (1, 2))


@pytest.fixture(scope="module")
def two_nights(published_hub: Path, tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A store with two nights of a small hub, the busier one later; not to be written."""
    path = tmp_path_factory.mktemp("nights")
    shutil.copytree(published_hub, path / "store")
    publish(path / "second", path / "store", **{**HUB, "mean": 30.0})
    return path / "store"


@pytest.fixture
def hub(two_nights: Path, tmp_path: Path) -> Path:
    """A copy of it with the first night in force."""
    shutil.copytree(two_nights, tmp_path / "store")
    put_in_force(tmp_path / "store", FIRST)
    return tmp_path / "store"


def put_in_force(store: Path, night: str) -> None:
    Store.open(store).restore(night, "tester", "a test wants this night")


class Gate:
    """Holds the making of lists back, or makes it fail."""

    def __init__(self) -> None:
        self.go = threading.Event()
        self.go.set()
        self.error: Exception | None = None
        self.threads: set[str] = set()
        self.niceness: set[int] = set()
        self._make = NightIndex.make

    def make(self, index: NightIndex) -> None:
        """Stand in for `NightIndex.make`."""
        self.threads.add(threading.current_thread().name)
        if sys.platform == "linux":
            self.niceness.add(os.getpriority(os.PRIO_PROCESS, threading.get_native_id()))
        assert self.go.wait(30)
        if self.error is not None:
            raise self.error
        self._make(index)


@pytest.fixture
def gate(monkeypatch: pytest.MonkeyPatch) -> Iterator[Gate]:
    gate = Gate()

    def make(index: NightIndex) -> None:
        gate.make(index)

    monkeypatch.setattr(NightIndex, "make", make)
    yield gate
    gate.go.set()


async def until(holds: Callable[[], Any], seconds: float = 30.0) -> None:
    async with asyncio.timeout(seconds):
        while not holds():
            await asyncio.sleep(0.02)


def preparation_of(service: Running) -> Preparation:
    found: Preparation = service.app.state.planner.preparation
    return found


def shown(service: Running) -> str:
    now = preparation_of(service).shown
    return "" if now is None else now.night.name


async def page(service: Running, address: str = "/") -> str:
    response: httpx.Response = await service.get(address)
    assert response.status_code == 200
    return check_page(response).text


def test_lists_are_made_before_anybody_asks_for_a_page(hub: Path, gate: Gate) -> None:
    async def check() -> None:
        with structlog.testing.capture_logs() as lines:
            async with running(hub) as service:
                await until(lambda: shown(service) == FIRST)
                await asyncio.to_thread(put_in_force, hub, SECOND)
                await until(lambda: shown(service) == SECOND)
                assert f"Night {SECOND}" in await page(service)
        ready = [line["night"] for line in lines if line["event"] == "pages of the night are ready"]
        assert ready == [FIRST, SECOND]

    asyncio.run(check())
    assert len(gate.threads) == 1
    assert threading.main_thread().name not in gate.threads


@pytest.mark.skipif(sys.platform != "linux", reason="priorities of threads are Linux's")
def test_only_the_thread_that_makes_lists_stands_back(hub: Path, gate: Gate) -> None:
    before = os.getpriority(os.PRIO_PROCESS, 0)

    async def check() -> None:
        async with running(hub) as service:
            await until(lambda: shown(service) == FIRST)
            assert os.getpriority(os.PRIO_PROCESS, 0) == before
            assert await asyncio.to_thread(os.getpriority, os.PRIO_PROCESS, 0) == before

    asyncio.run(check())
    assert gate.niceness == {min(19, before + NICENESS)}


def test_pages_show_the_night_before_and_say_so_until_the_new_one_is_ready(hub: Path, gate: Gate) -> None:
    async def check() -> None:
        async with running(hub) as service:
            await until(lambda: shown(service) == FIRST)
            before = await page(service, "/leg?name=IN0")
            gate.go.clear()
            await asyncio.to_thread(put_in_force, hub, SECOND)
            await until(lambda: service.state.night().name == SECOND)
            # Requests are judged by the new night, while the pages show the one before, all of them alike.
            answer = (await service.ask(itinerary="IN0", fare_class="Q")).json()
            assert answer["night"] == SECOND
            begun = time.monotonic()
            for address in ("/", "/map", "/leg?name=IN0", "/itinerary?name=IN0", "/disagreements", "/changes"):
                text = await page(service, address)
                assert f"Night {SECOND} is in force, and requests are judged by it." in text
                assert f"this page shows night {FIRST} and its prices" in text
            assert time.monotonic() - begun < 20
            during = await page(service, "/leg?name=IN0")
            assert _figures(during) == _figures(before)
            gate.go.set()
            await until(lambda: shown(service) == SECOND)
            after = await page(service, "/leg?name=IN0")
            assert "this page shows night" not in after
            assert f"{answer['displacement']:,.2f}" in after
            assert _figures(after) != _figures(before)

    asyncio.run(check())


def _figures(text: str) -> str:
    """All that stands on a page below its head."""
    return text.split("come first", 1)[1]


def test_the_first_pages_of_all_say_that_they_are_not_ready(
    hub: Path, gate: Gate, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(preparing, "PATIENCE", 0.05)
    gate.go.clear()

    async def check() -> None:
        async with running(hub) as service:
            for address in ("/", "/map", "/leg/now.json?name=IN0", "/disagreements.csv"):
                response = await service.get(address)
                assert response.status_code == 503
                assert response.headers["retry-after"] == "2"
                found = check_page(response)
                assert ("meta", {"http-equiv": "refresh", "content": "2"}) in found.tags
                assert f"pages of night {FIRST} are being made ready" in found.text
            assert (await service.ask(itinerary="IN0", fare=900.0)).status_code == 200
            monkeypatch.setattr(preparing, "PATIENCE", 30.0)
            waiting = asyncio.create_task(service.get("/"))
            await asyncio.sleep(0.05)
            gate.go.set()
            assert (await waiting).status_code == 200

    asyncio.run(check())


def test_lists_that_cannot_be_made_leave_the_night_before_and_are_tried_again(
    hub: Path, gate: Gate, monkeypatch: pytest.MonkeyPatch
) -> None:
    async def check() -> None:
        async with running(hub) as service:
            await until(lambda: shown(service) == FIRST)
            gate.error = NightDamagedError("legs.parquet <b> is torn")
            with structlog.testing.capture_logs() as lines:
                await asyncio.to_thread(put_in_force, hub, SECOND)
                await until(lambda: preparation_of(service).trouble)
                for _ in range(3):
                    text = await page(service)
                    assert "Its pages cannot be made ready (legs.parquet <b> is torn)" in text
                    assert f"this page shows night {FIRST}" in text
            assert len([line for line in lines if line["log_level"] == "error"]) == 1
            gate.error = None
            monkeypatch.setattr(preparing, "AGAIN", 0.0)
            await service.get("/")
            await until(lambda: shown(service) == SECOND)
            assert "this page shows night" not in await page(service)

    asyncio.run(check())


def test_a_first_night_whose_lists_cannot_be_made_is_an_error_page(hub: Path, gate: Gate) -> None:
    gate.error = NightDamagedError("legs.parquet is torn")

    async def check() -> None:
        async with running(hub) as service:
            for _ in range(2):
                response = await service.get("/")
                assert response.status_code == NightDamagedError.http_status
                assert "legs.parquet is torn" in check_page(response).text

    asyncio.run(check())


def test_a_night_that_is_overtaken_is_given_up(hub: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    async def check() -> None:
        nights = Store.open(hub).nights()
        served = [ServedNight(nights[which], 10) for which in (0, 1, 0)]
        preparation = Preparation()
        sound = night_index.STATIONS
        # A statement that would run for hours stands for the lists of a great night.
        endless = "CREATE TABLE stations AS SELECT count(*) FROM range(10000000000) AS a, range(10000000000) AS b"
        monkeypatch.setattr(night_index, "STATIONS", endless)
        preparation.prepare(served[0])
        await asyncio.sleep(0.5)
        preparation.prepare(served[1])
        await asyncio.sleep(0.5)
        monkeypatch.setattr(night_index, "STATIONS", sound)
        preparation.prepare(served[2])
        await until(lambda: preparation.shown is not None, 10.0)
        assert preparation.shown is not None
        assert preparation.shown.night is served[2]
        assert preparation.error is None
        # And so is what is being made when the service ends.
        monkeypatch.setattr(night_index, "STATIONS", endless)
        preparation.prepare(served[0])
        await asyncio.sleep(0.3)
        begun = time.monotonic()
        await asyncio.to_thread(preparation.close)
        assert time.monotonic() - begun < 5
        await asyncio.sleep(0.05)
        assert preparation.shown.night is served[2]

    asyncio.run(check())


def test_lists_are_in_the_order_of_names_and_departures(hub: Path) -> None:
    night = Store.open(hub).in_force()
    assert night is not None
    index = NightIndex(night)
    index.make()
    rows = index.rows("SELECT * FROM itineraries ORDER BY number")
    names = [row["itinerary"] for row in rows]
    assert names == sorted(night.table("itineraries", ["itinerary"])["itinerary"].to_pylist())
    assert [row["number"] for row in rows] == list(range(1, len(rows) + 1))
    ranked = sorted(rows, key=lambda row: row["departs_rank"])
    assert [row["departs"] for row in ranked] == sorted(row["departs"] for row in rows)
    assert len({row["departs_rank"] for row in rows}) == len({row["departs"] for row in rows})
