"""What a snapshot of the carrier's counts is told: legs that the night does not sell, and legs oversold."""

from __future__ import annotations

import asyncio
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any

from prometheus_client.parser import text_string_to_metric_families
from sqlalchemy import select

from legworth.service.ledger_tables import overwritings
from legworth.store import Store
from tests.legworth.service.in_process import Running, running
from tests.legworth.service.test_interface import problem, sold

NIGHT = "00001-2027-03-01"
LEGS = 12
"""Legs of the small hub: three in and three out on two days."""


def audited(service: Running) -> list[str]:
    """Legs that have an audit row."""
    with service.state.ledger.engine.connect() as connection:
        return list(connection.scalars(select(overwritings.c.leg).order_by(overwritings.c.number)))


async def put(service: Running, counts: list[tuple[str, int, int]], **more: Any) -> Any:
    """Send a snapshot: leg, capacity, sold."""
    rows = [{"leg": leg, "capacity": capacity, "sold": sold} for leg, capacity, sold in counts]
    headers = {"Authorization": f"Bearer {service.token}"}
    return await service.client.put("/v1/seat-counts", json={"why": "02:00", "counts": rows, **more}, headers=headers)


def test_a_snapshot_hears_of_legs_that_the_night_does_not_sell(store: Path) -> None:
    async def check() -> None:
        async with running(store) as service:
            counts = [("FX", 20, 3), ("IN0", 20, 4), ("LATER", 20, 0)]
            first = (await put(service, counts)).json()
            assert first == {
                "moved": 3,
                "unknown_legs": 2,
                "unknown": ["FX", "LATER"],
                "oversold_legs": 0,
                "oversold": [],
                "night": NIGHT,
            }
            # Again: nothing moves, no further audit row, and the caller hears of them as before.
            assert (await put(service, counts)).json() == {**first, "moved": 0}
            assert audited(service) == ["FX", "IN0", "LATER"]

    asyncio.run(check())


def test_a_snapshot_of_known_legs_only_is_taken_whole_or_not_at_all(store: Path) -> None:
    async def check() -> None:
        async with running(store) as service:
            found = problem(await put(service, [("IN0", 20, 4), ("FX", 20, 3)], known_legs_only=True), 422)
            assert found["detail"] == (
                "1 leg of the snapshot is unknown, so that none is counted; correct the faults listed"
            )
            assert found["faults"] == [
                f"body.counts.1.leg: 'FX' is no leg of night {NIGHT}; correct its name, leave it out, or leave out "
                "known_legs_only"
            ]
            assert await sold(service, "IN0") == 0
            assert audited(service) == []
            assert (await service.get("/v1/health")).json()["latest_counts"] is None
            taken = (await put(service, [("IN0", 20, 4)], known_legs_only=True)).json()
            assert (taken["moved"], taken["unknown"]) == (1, [])

    asyncio.run(check())


def test_names_and_faults_are_bounded(store: Path) -> None:
    async def check() -> None:
        async with running(store) as service:
            counts = [(f"X{number}", 1, 2) for number in range(300)]
            faults = problem(await put(service, counts, known_legs_only=True), 422)["faults"]
            assert len(faults) == 51
            assert faults[-1] == "and 250 more"
            found = (await put(service, counts)).json()
            for names, count in (("unknown", "unknown_legs"), ("oversold", "oversold_legs")):
                assert found[names] == [f"X{number}" for number in range(50)]
                assert found[count] == 300

    asyncio.run(check())


def test_oversold_legs_are_taken_and_named_and_nothing_is_sold_on_them(store: Path) -> None:
    async def check() -> None:
        async with running(store) as service:
            found = (await put(service, [("IN0", 18, 20), ("IN1", 20, 20)])).json()
            assert (found["moved"], found["oversold_legs"], found["oversold"]) == (2, 1, ["IN0"])
            leg = (await service.get("/v1/legs/IN0")).json()
            assert (leg["capacity"], leg["sold"], leg["remaining"]) == (18, 20, 0)
            answer = (await service.sell(itinerary="IN0", fare=9_000.0)).json()
            assert (answer["accepted"], answer["reason"]) == (False, "no_seats")

    asyncio.run(check())


def test_health_and_metrics_tell_legs_of_the_night_from_those_of_the_ledger(store: Path) -> None:
    async def check() -> None:
        async with running(store) as service:
            before = (await service.get("/v1/health")).json()
            assert (before["legs"], before["ledger_legs"], before["latest_counts"]) == (LEGS, LEGS, None)
            begin = datetime.now(UTC)
            await put(service, [("FX", 20, 3), ("IN0", 20, 21)])
            after = (await service.get("/v1/health")).json()
            assert (after["legs"], after["ledger_legs"]) == (LEGS, LEGS + 1)
            latest = after["latest_counts"]
            assert timedelta(0) <= datetime.fromisoformat(latest.pop("at")) - begin < timedelta(minutes=1)
            assert latest == {"legs": 2, "unknown_legs": 1, "oversold_legs": 1}
            text = (await service.get("/metrics")).text
            families = {family.name: family for family in text_string_to_metric_families(text)}
            counted = {
                sample.labels["which"]: sample.value
                for sample in families["legworth_counted_legs"].samples
                if sample.name.endswith("_total")
            }
            assert counted == {"all": 2, "unknown": 1, "oversold": 1}
            assert families["legworth_night_legs"].samples[0].value == LEGS
            assert families["legworth_ledger_legs"].samples[0].value == LEGS + 1

    asyncio.run(check())


def test_without_a_night_all_legs_are_unknown(tmp_path: Path) -> None:
    Store.open(tmp_path / "store", create=True)

    async def check() -> None:
        async with running(tmp_path / "store") as service:
            problem(await put(service, [("IN0", 20, 4)], known_legs_only=True), 503)
            found = (await put(service, [("IN0", 20, 4)])).json()
            assert (found["moved"], found["unknown"], found["night"]) == (1, ["IN0"], None)

    asyncio.run(check())
