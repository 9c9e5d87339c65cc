"""From a question as it is asked to the part, path and fare that judge it."""

from __future__ import annotations

from collections.abc import Sequence
from itertools import pairwise
from typing import Any

from legworth.decisions import Reason
from legworth.service.errors import UnknownError
from legworth.service.messages import Ask
from legworth.service.served_night import ServedNight
from legworth.service.served_part import Question, ServedPart
from network import SettingError

__all__ = ["ask", "at_any_price", "find"]


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


PRICE_REFUSES = {Reason.FARE_BELOW_PRICE.name.lower(), Reason.NO_PRICE.name.lower()}


def at_any_price(answer: dict[str, Any]) -> dict[str, Any]:
    """Accept an answer that only its price refuses, and note that it was so."""
    if answer["reason"] not in PRICE_REFUSES:
        return answer
    sentence = answer["sentence"].replace("Refused: ", "Sold at any price: ", 1)
    return {**answer, "accepted": True, "at_any_price": True, "sentence": sentence}
