"""A batch is judged in slices, and everybody else is looked after between them."""

from __future__ import annotations

import asyncio
from collections.abc import AsyncIterator
from contextlib import asynccontextmanager
from pathlib import Path
from random import Random
from typing import Any

import numpy as np
import pytest

from legworth.service import asking_many
from legworth.service.asking_many import Turns, answer_many
from legworth.service.messages import AskMany
from legworth.service.served_night import ServedNight
from legworth.store import Store
from tests.legworth.service.stores import AS_OF, HUB

COUNT = 2_300
NOW = AS_OF.timestamp()


@pytest.fixture
def night(published_hub: Path) -> ServedNight:
    found = Store.open(published_hub).in_force()
    assert found is not None
    return ServedNight(found, 10)


@pytest.fixture
def left(night: ServedNight) -> dict[str, int]:
    return {count.leg: count.remaining - index % 4 for index, count in enumerate(night.counts())}


def drawn(night: ServedNight, seed: int, count: int = COUNT) -> AskMany:
    """Questions of both parts, in no order, some of them for itineraries that nobody sells."""
    draw = Random(seed)
    names = [*night.night.table("itineraries", ["itinerary"])["itinerary"].to_pylist(), "nobody"]
    return AskMany(
        itinerary=tuple(draw.choices(names, k=count)),
        fare_class=tuple(draw.choices([*HUB["fares"], "none"], k=count)),
        seats=tuple(draw.choices([1, 2, 30], k=count)),
        sentences=True,
    )


class Rounds:
    """Counts the rounds of the loop: in each of them whoever waits is looked after."""

    def __init__(self) -> None:
        self.count = 0

    @asynccontextmanager
    async def counted(self) -> AsyncIterator[None]:
        async def count() -> None:
            while True:
                self.count += 1
                await asyncio.sleep(0)

        task = asyncio.create_task(count())
        try:
            yield
        finally:
            task.cancel()


def same(one: dict[str, Any], other: dict[str, Any]) -> bool:
    return all(np.array_equal(one[name], other[name], equal_nan=name in ("fare", "displacement")) for name in one)


def test_slices_answer_as_one_pass_does_and_let_others_in(
    night: ServedNight, left: dict[str, int], monkeypatch: pytest.MonkeyPatch
) -> None:
    async def check() -> None:
        asked, rounds = drawn(night, 1), Rounds()
        await night.warm(night.night.parts())
        monkeypatch.setattr(asking_many, "SLICE", 10**6)
        monkeypatch.setattr(asking_many, "TURN", 1e9)
        async with rounds.counted():
            whole = await answer_many(night, asked, left, NOW, Turns())
            assert rounds.count <= 2
            assert {True, False} == set(whole["accepted"].tolist())
            assert len(set(whole["reason"])) >= 4
            monkeypatch.setattr(asking_many, "SLICE", 100)
            monkeypatch.setattr(asking_many, "TURN", 0.0)
            rounds.count = 0
            assert same(whole, await answer_many(night, asked, left, NOW, Turns()))
            # One round for each slice of names looked up, and for each slice that is judged.
            known = sum(name != "nobody" for name in asked.itinerary)
            assert rounds.count >= COUNT / 100 + known / 100 - 1
            monkeypatch.setattr(asking_many, "TURN", 1e9)
            rounds.count = 0
            assert same(whole, await answer_many(night, asked, left, NOW, Turns()))
            assert rounds.count <= 2

    asyncio.run(check())


def test_batches_take_turns_so_that_others_wait_for_one_slice(
    night: ServedNight, left: dict[str, int], monkeypatch: pytest.MonkeyPatch
) -> None:
    rounds, judged, judge = Rounds(), [], asking_many._Answers.judge

    def noted(self: Any, *words: Any) -> None:
        judged.append((rounds.count, id(self)))
        judge(self, *words)

    async def check() -> None:
        await night.warm(night.night.parts())
        monkeypatch.setattr(asking_many, "SLICE", 50)
        monkeypatch.setattr(asking_many, "TURN", 0.0)
        batches = [drawn(night, seed) for seed in range(4)]
        alone = [await answer_many(night, batch, left, NOW, Turns()) for batch in batches]
        monkeypatch.setattr(asking_many._Answers, "judge", noted)
        turns = Turns()
        async with rounds.counted():
            together = await asyncio.gather(*(answer_many(night, batch, left, NOW, turns) for batch in batches))
        assert all(same(one, other) for one, other in zip(alone, together, strict=True))
        assert len({number for number, _ in judged}) == len(judged) > 4 * COUNT / 50 * 0.9
        # None of them is kept until the others have ended.
        assert len({batch for _, batch in judged[: len(judged) // 2]}) == 4

    asyncio.run(check())


def test_whoever_waits_for_a_part_or_goes_away_holds_nobody_up(
    night: ServedNight, left: dict[str, int], monkeypatch: pytest.MonkeyPatch
) -> None:
    async def check() -> None:
        first, second = night.night.parts()
        await night.warm([first])
        come, read = asyncio.Event(), night.part

        async def slow(name: str) -> Any:
            await come.wait()
            return await read(name)

        monkeypatch.setattr(night, "part", slow)
        turns = Turns()
        waiting = [asyncio.create_task(answer_many(night, drawn(night, seed), left, NOW, turns)) for seed in (1, 2)]
        names = night.night.table("itineraries", ["itinerary"], parts=[first])["itinerary"].to_pylist()
        asked = AskMany(itinerary=tuple(names), fare_class=("Y",) * len(names))
        async with asyncio.timeout(10):
            found = await answer_many(night, asked, left, NOW, turns)
        assert found["accepted"].any()
        assert not any(each.done() for each in waiting)
        waiting[0].cancel()
        come.set()
        async with asyncio.timeout(10):
            assert len((await waiting[1])["reason"]) == COUNT
            assert len((await answer_many(night, asked, left, NOW, turns))["reason"]) == len(names)
        assert waiting[0].cancelled()
        assert second in night.in_memory()

    asyncio.run(check())


def test_a_batch_that_fails_gives_its_turn_back(
    night: ServedNight, left: dict[str, int], monkeypatch: pytest.MonkeyPatch
) -> None:
    async def check() -> None:
        turns, asked = Turns(), drawn(night, 1, 10)
        with monkeypatch.context() as patched:
            patched.setattr(asking_many, "decide", None)
            with pytest.raises(TypeError):
                await answer_many(night, asked, left, NOW, turns)
        async with asyncio.timeout(10):
            assert len((await answer_many(night, asked, left, NOW, turns))["reason"]) == 10

    asyncio.run(check())
