"""A day on which nothing is left to sell, and one that has departed, are answered like any other."""

from __future__ import annotations

import asyncio
from contextlib import contextmanager
from datetime import UTC, datetime
from pathlib import Path

import pytest

from legworth.refresh import RefreshOptions, refresh
from legworth.service.settings import ServiceSettings
from legworth.store import Store
from tests.legworth.refresh.nights import PRICING
from tests.legworth.service.in_process import running
from tests.legworth.service.pages.hostile_night import leg_named, opened
from tests.legworth.service.pages.reading import check_page
from tests.legworth.service.stores import HUB, write_hub

FIRST_DAY_GONE = datetime(2027, 3, 11, 23, tzinfo=UTC)


@pytest.fixture(params=["sold out", "departed"])
def empty_day(request: pytest.FixtureRequest, tmp_path: Path) -> Path:
    """A store whose night has no seats on the first day of two; nothing of it is written to price_curves."""
    folder, store = tmp_path / "network", tmp_path / "store"
    departed = request.param == "departed"
    write_hub(folder, **HUB, **({"as_of": FIRST_DAY_GONE} if departed else {}))
    if not departed:
        legs = (folder / "legs.csv").read_text()
        (folder / "legs.csv").write_text(
            "\n".join(line[:-1] + "20" if "2027-03-11" in line else line for line in legs.splitlines()) + "\n"
        )
    refresh(folder, store, RefreshOptions(PRICING, force="a test wants it"))
    night = Store.open(store).in_force()
    assert night is not None
    assert 0 in {night.table("price_curves", parts=[part]).num_rows for part in night.parts()}
    return store


def test_it_is_refused_and_spoils_nothing_else(empty_day: Path) -> None:
    async def check() -> None:
        night = Store.open(empty_day).in_force()
        assert night is not None
        as_of = night.manifest.as_of
        why = "departed" if as_of == FIRST_DAY_GONE else "no_seats"
        async with running(empty_day, as_of) as service:
            one = await service.ask(itinerary="IN0-OUT1", fare_class="Y")
            assert (one.status_code, one.json()["accepted"], one.json()["reason"]) == (200, False, why)
            batch = {"itinerary": ["IN0", "IN0.1", "nowhere"], "fare": [500.0] * 3}
            many = (await service.client.post("/v1/decisions/batch", json=batch)).json()
            assert many["reason"] == [why, "fare_reaches_price", "unknown_itinerary"]
            leg = await service.get("/v1/legs/IN0")
            assert (leg.status_code, leg.json()["bid_price"] is not None) == (200, True)

    asyncio.run(check())


def test_its_pages_are_shown(empty_day: Path) -> None:
    with contextmanager(opened)(Store.open(empty_day), ServiceSettings()) as browser:
        for address in (leg_named("IN0"), "/map?date=2027-03-11", "/", "/disagreements"):
            check_page(browser.get(address))
