"""One answer at a time, many at once, and the tables of `legworth decide` say the same."""

from __future__ import annotations

import asyncio
from dataclasses import replace
from typing import Any

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st

from legworth.decisions import Reason, decide, decisions_table
from legworth.price_table import PriceTable
from legworth.request_table import located
from legworth.service.asking import ask
from legworth.service.asking_many import Turns, answer_many
from legworth.service.errors import UnknownError
from legworth.service.messages import Ask, AskMany
from legworth.service.served_part import ServedPart
from tests.networks import Plan, examples, plans

DAY = 86_400.0
FIELDS = ("accepted", "reason", "fare", "displacement", "binding_leg", "sentence")


class OnePart:
    """A night of a single part, as answers see one."""

    name = "00001-2030-01-01"

    def __init__(self, part: ServedPart) -> None:
        self.one = part
        self.itineraries = self.legs = self

    def part_of(self, name: str) -> str | None:
        known = name in self.one.itinerary_position or name in self.one.leg_position
        return self.one.name if known else None

    def codes_of(self, names: Any) -> Any:
        return np.array([0 if name in self.one.itinerary_position else -1 for name in names])

    def by_part(self, codes: Any) -> Any:
        parts = ((None, np.flatnonzero(codes < 0)), (self.one.name, np.flatnonzero(codes == 0)))
        return [(name, rows) for name, rows in parts if len(rows)]

    def ready(self, _name: str) -> ServedPart:
        return self.one

    async def part(self, _name: str) -> ServedPart:
        return self.one


def without_spaces(names: np.ndarray) -> np.ndarray:
    return np.array([name.replace(" ", "-") for name in names], dtype=object)


def drawn_part(plan: Plan, rng: np.random.Generator) -> ServedPart:
    """A network with plain bid prices or price curves, some legs without either; money falls on eighths and cents."""
    drawn = plan.network()
    legs = replace(drawn.legs, name=without_spaces(drawn.legs.name))
    network = replace(drawn, legs=legs, itinerary=without_spaces(drawn.itinerary))
    bid_price = np.where(rng.random(network.n_legs) < 0.2, np.nan, money(rng, network.n_legs))
    first_block, days, first_seat, prices = [0], [], [0], []
    curves = rng.random() < 0.6
    for _ in range(network.n_legs):
        for day in sorted(rng.choice([0.0, 1.0, 2.5, 7.0, 30.0], rng.integers(0, 4) * curves, replace=False))[::-1]:
            days.append(day)
            prices += money(rng, int(rng.integers(1, 9))).tolist()
            first_seat.append(len(prices))
        first_block.append(len(days))
    table = PriceTable(bid_price, np.array(first_block), np.array(days), np.array(first_seat), np.array(prices))
    return ServedPart("all", network, table)


def money(rng: np.random.Generator, count: int) -> np.ndarray:
    return np.where(rng.random(count) < 0.5, rng.integers(0, 8_000, count) / 8, rng.integers(0, 99_999, count) / 100)


def drawn_questions(part: ServedPart, rng: np.random.Generator, count: int) -> list[dict[str, Any]]:
    names = [*map(str, part.network.itinerary), "nowhere"]
    classes = [*part.network.fare_classes, "no class"]
    asked = []
    for fare in money(rng, count).tolist():
        given_class, given_fare = rng.random() < 0.7, rng.random() < 0.5
        asked.append(
            {
                "itinerary": names[rng.integers(len(names))],
                "fare_class": classes[rng.integers(len(classes))] if given_class else None,
                "fare": fare if given_fare or not given_class else None,
                "seats": int(rng.integers(1, 6)),
            }
        )
    return asked


def by_table(part: ServedPart, asked: list[dict[str, Any]], left: dict[str, int], now: float) -> list[dict[str, Any]]:
    """Answers as `legworth decide` makes them from a table."""
    frame = pd.DataFrame({"request": range(len(asked))})
    for name in ("itinerary", "fare_class"):
        frame[name] = pd.Series([one[name] for one in asked], dtype="str").astype("category")
    fare = np.array([np.nan if one["fare"] is None else one["fare"] for one in asked])
    seats = np.array([one["seats"] for one in asked])
    moment = np.full(len(asked), now)
    requests = located(part.network, frame["itinerary"], frame["fare_class"], fare, seats, moment)
    found = decide(part.network, part.prices, requests, part.remaining(left))
    table = decisions_table(part.network, frame, requests, found)
    table["accepted"] = table["answer"] == "accept"
    rows = table[list(FIELDS)].astype(object)
    return rows.where(rows.notna(), None).to_dict("records")


def drawn_left(part: ServedPart, rng: np.random.Generator, most: int) -> dict[str, int]:
    return {str(name): int(rng.integers(most + 1)) for name in part.network.legs.name}


numbers = st.integers(0, 2**32 - 1)


@examples(150)
@given(plans(), numbers)
def test_one_many_and_tables_agree(plan: Plan, number: int) -> None:
    rng = np.random.default_rng(number)
    part = drawn_part(plan, rng)
    asked, left = drawn_questions(part, rng, 12), drawn_left(part, rng, 9)
    # Legs of these networks depart at the beginning of 1970.
    now = -DAY * rng.choice([-1.0, 0.0, 0.25, 1.0, 2.0, 2.5, 6.9, 40.0])
    expected = by_table(part, asked, left, now)
    night: Any = OnePart(part)
    for question, wanted in zip(asked, expected, strict=True):
        if wanted["reason"] == "unknown_itinerary":
            with pytest.raises(UnknownError):
                asyncio.run(ask(night, Ask(**question), left, now))
            continue
        answer = asyncio.run(ask(night, Ask(**question), left, now))
        assert {name: answer[name] for name in FIELDS} == wanted
        assert answer["night"] == night.name
    columns: dict[str, Any] = {name: tuple(one[name] for one in asked) for name in asked[0]}
    many = asyncio.run(answer_many(night, AskMany(**columns, sentences=True), left, now, Turns()))
    for name in FIELDS:
        said = [
            None if isinstance(each, float) and np.isnan(each) else each for each in np.asarray(many[name]).tolist()
        ]
        assert said == [wanted[name] for wanted in expected], name


@examples(60)
@given(plans(), numbers)
def test_legs_are_answered_as_their_itinerary_is(plan: Plan, number: int) -> None:
    rng = np.random.default_rng(number)
    part = drawn_part(plan, rng)
    left = drawn_left(part, rng, 9)
    night: Any = OnePart(part)
    for path, position in part.itinerary_of_path.items():
        legs = tuple(str(part.network.legs.name[leg]) for leg in path)
        name = str(part.network.itinerary[position])
        by_legs = asyncio.run(ask(night, Ask(legs=legs, fare=100.0), left, -DAY))
        assert by_legs == asyncio.run(ask(night, Ask(itinerary=name, fare=100.0), left, -DAY))
        assert Reason[by_legs["reason"].upper()] >= Reason.NO_SEATS
