"""From a question as it is asked to the part, path and fare that judge it."""

from __future__ import annotations

from collections.abc import Sequence
from itertools import pairwise
from typing import Any

import numpy as np
import pandas as pd

from legworth.decisions import Reason, decide, decisions_table
from legworth.request_table import located
from legworth.service.errors import UnknownError
from legworth.service.messages import Ask, AskMany
from legworth.service.served_night import ServedNight
from legworth.service.served_part import Question, ServedPart
from network import SettingError

__all__ = ["answer_many", "ask", "find"]


async def find(night: ServedNight, asked: Ask, now: float) -> tuple[ServedPart, Question, bool]:
    """Find the part, the question by position, and whether the itinerary is sold in the class asked for.

    ``now`` is in seconds since 1970-01-01 UTC.

    Raises
    ------
    UnknownError
        If the itinerary, a leg or the fare class is not on sale.
    SettingError
        If the legs do not make a journey, or belong to no itinerary and no fare is given.
    """
    if asked.itinerary is not None:
        name = night.itineraries.part_of(asked.itinerary)
        if name is None:
            raise UnknownError(f"itinerary {asked.itinerary!r} is not on sale; correct its name")
        part = night.ready(name) or await night.part(name)
        position = part.itinerary_position[asked.itinerary]
        itinerary: int | None = position
        path = part.path(position)
    else:
        part, path = await _path(night, asked.legs or ())
        itinerary = part.itinerary_of_path.get(path)
    fare, known = asked.fare, True
    if asked.fare_class is not None and itinerary is not None:
        sold_at = part.fare_of(itinerary, part.class_position.get(asked.fare_class, -1))
        known = sold_at is not None
        fare = sold_at if fare is None else fare
    elif fare is None:
        raise SettingError("no itinerary runs on these legs, so that the class has no fare; give a fare")
    names = tuple(part.network.legs.name[leg] for leg in path)
    itinerary_name = None if itinerary is None else str(part.network.itinerary[itinerary])
    question = Question(path, names, itinerary_name, asked.fare_class, fare, asked.seats, now)
    return part, question, known


async def _path(night: ServedNight, legs: Sequence[str]) -> tuple[ServedPart, tuple[int, ...]]:
    """Find the part of some legs, which must follow one another."""
    names = [night.legs.part_of(leg) for leg in legs]
    for leg, name in zip(legs, names, strict=True):
        if name is None:
            raise UnknownError(f"leg {leg!r} is not on sale; correct its name")
    if len(set(names)) > 1:
        raise SettingError("no itinerary ties these legs together; ask for each journey by itself")
    part = await night.part(str(names[0]))
    path = tuple(part.leg_position[leg] for leg in legs)
    table = part.network.legs
    for before, after in pairwise(path):
        if table.destination[before] != table.origin[after] or table.departs[after] < table.arrives[before]:
            raise SettingError(
                f"{table.name[after]} does not follow on {table.name[before]}; give the legs in travel order"
            )
    return part, path


async def ask(night: ServedNight, asked: Ask, left: dict[str, int], now: float) -> dict[str, Any]:
    """Answer one question against the seats left now."""
    part, question, known = await find(night, asked, now)
    return part.answer(question, left, known) | {"night": night.name}


async def answer_many(night: ServedNight, asked: AskMany, left: dict[str, int], now: float) -> dict[str, Any]:
    """Answer many questions, each by itself, part by part; an unknown itinerary is refused, not an error."""
    count = len(asked.itinerary)
    moment = np.full(count, now)
    frame = pd.DataFrame(
        {
            "request": np.arange(count),
            "itinerary": pd.Series(asked.itinerary, dtype="category"),
            "fare_class": pd.Series(asked.fare_class or [None] * count, dtype="category"),
        }
    )
    fare = np.array([np.nan if each is None else each for each in asked.fare or [None] * count], dtype=np.float64)
    seats = np.array(asked.seats or [1] * count, dtype=np.int64)
    known = {name: night.itineraries.part_of(name) for name in set(asked.itinerary)}
    where = pd.Series([known[name] or "" for name in asked.itinerary], dtype="category")
    answers: dict[str, list[Any]] = {name: [None] * count for name in ("fare", "displacement", "binding_leg")}
    answers |= {"accepted": [False] * count, "reason": [Reason.UNKNOWN_ITINERARY.name.lower()] * count}
    answers["sentence"] = ["Refused: the itinerary is not known."] * count
    for name in where.cat.categories:
        if name == "":
            continue
        rows = np.flatnonzero(where == name)
        part = night.ready(name) or await night.part(name)
        some = frame.iloc[rows]
        requests = located(part.network, some["itinerary"], some["fare_class"], fare[rows], seats[rows], moment[rows])
        found = decide(part.network, part.prices, requests, part.remaining(left))
        binding = [None if leg < 0 else part.network.legs.name[leg] for leg in found.binding_leg]
        columns = {
            "accepted": found.accepted.tolist(),
            "reason": [WORDS[reason] for reason in found.reason],
            "fare": _numbers(found.fare),
            "displacement": _numbers(found.displacement),
            "binding_leg": binding,
        }
        if asked.sentences:
            columns["sentence"] = decisions_table(part.network, some, requests, found)["sentence"].tolist()
        for column, values in columns.items():
            whole = answers[column]
            for row, value in zip(rows.tolist(), values, strict=True):
                whole[row] = value
    if not asked.sentences:
        answers["sentence"] = None  # type: ignore[assignment]
    return {**answers, "night": night.name}


WORDS = {int(reason): reason.name.lower() for reason in Reason}


def _numbers(values: np.ndarray) -> list[float | None]:
    return [None if np.isnan(value) else value for value in values.tolist()]


def at_any_price(answer: dict[str, Any]) -> dict[str, Any]:
    """Accept an answer that only its price refuses."""
    if answer["reason"] != Reason.FARE_BELOW_PRICE.name.lower():
        return answer
    sentence = answer["sentence"].replace("Refused: ", "Sold at any price: ", 1)
    return {**answer, "accepted": True, "sentence": sentence}
