"""One part of a night as the service uses it: the network, its prices, and answers against the seats left now."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from functools import cached_property
from itertools import repeat
from math import isnan
from pathlib import Path
from typing import Any

import numpy as np

from heuristics.arrivals import DAY
from legworth.control import EQUAL
from legworth.decisions import SENTENCES, Reason, Requests
from legworth.price_table import PriceTable, read_prices
from network import Network, read_folder
from network.arrays import FloatArray, IntArray, NameArray

__all__ = ["Question", "ServedPart", "read_part"]


@dataclass(frozen=True)
class Question:
    """A request to be judged.

    Attributes
    ----------
    path
        Legs in travel order, as positions in the part.
    names
        Their names.
    itinerary, fare_class
        As asked; None where legs, or a fare, were given instead.
    fare
        Currency for one passenger; None if unknown.
    seats
        Passengers.
    moment
        Instant of the request, seconds since 1970-01-01 UTC.
    """

    path: tuple[int, ...]
    names: tuple[str, ...]
    itinerary: str | None
    fare_class: str | None
    fare: float | None
    seats: int
    moment: float

    def at(self, moment: float) -> Question:
        """Return the same question, asked at another moment."""
        return replace(self, moment=moment)


@dataclass(frozen=True, eq=False)
class ServedPart:
    """A part: its network and prices in force.

    Attributes
    ----------
    name
        Name of the part.
    network, prices
        What is sold, and at which prices.
    """

    name: str
    network: Network
    prices: PriceTable

    @cached_property
    def leg_position(self) -> dict[str, int]:
        """Position of every leg by name."""
        return {name: position for position, name in enumerate(self.network.legs.name)}

    @cached_property
    def itinerary_position(self) -> dict[str, int]:
        """Position of every itinerary by name."""
        return {name: position for position, name in enumerate(self.network.itinerary)}

    @cached_property
    def class_position(self) -> dict[str, int]:
        """Position of every fare class by name."""
        return {name: position for position, name in enumerate(self.network.fare_classes)}

    @cached_property
    def itinerary_of_path(self) -> dict[tuple[int, ...], int]:
        """Position of the itinerary that runs on some legs."""
        return {self.path(position): position for position in range(self.network.n_itineraries)}

    @cached_property
    def _departs(self) -> list[float]:
        return [float(second) for second in self.network.legs.departs.astype("datetime64[s]").astype(np.int64)]

    @cached_property
    def leg_names(self) -> NameArray:
        """(L + 1,) names of the legs, and None at the end, where position -1 finds it."""
        return np.array([*self.network.legs.name, None], dtype=object)

    @cached_property
    def _product_key(self) -> IntArray:
        """(P,) rising key of all products: itinerary, then class."""
        network = self.network
        return network.product_itinerary.astype(np.int64) * len(network.fare_classes) + network.product_class

    def prepare(self) -> None:
        """Make all that answers look up, while nobody waits for it."""
        for _ in (self.leg_position, self.itinerary_position, self.class_position, self.itinerary_of_path):
            pass
        for _ in (self.leg_names, self._departs, self._product_key):
            pass
        if self.network.n_legs:
            self.prices.party_price(*(np.zeros(1, dtype=np.int64), np.zeros(1)), *2 * [np.ones(1, dtype=np.int64)])
            self.prices.one_party_price(0, 0.0, 1, 2)

    def located(
        self,
        itineraries: Sequence[str],
        classes: Sequence[str | None] | None,
        fare: FloatArray,
        seats: IntArray,
        now: float,
    ) -> Requests:
        """Look many requests up by name, just as `legworth.request_table.located` does for tables."""
        at = np.fromiter(map(self.itinerary_position.get, itineraries, repeat(-1)), np.int64, len(itineraries))
        product = np.full(len(at), -1)
        if classes is not None and len(self._product_key):
            codes: dict[str | None, int] = {None: -1}
            codes |= {name: code for code, name in enumerate(self.network.fare_classes)}
            of_class = np.fromiter(map(codes.get, classes, repeat(-2)), np.int64, len(classes))
            wanted = at * len(self.network.fare_classes) + of_class
            place = np.minimum(np.searchsorted(self._product_key, wanted), len(self._product_key) - 1)
            sold = (at >= 0) & (of_class >= 0) & (self._product_key[place] == wanted)
            product = np.where(of_class == -1, -1, np.where(sold, place, -2))
        elif classes is not None:
            product = np.array([-1 if name is None else -2 for name in classes])
        return Requests(at, product, fare, seats, np.full(len(at), now))

    def path(self, itinerary: int) -> tuple[int, ...]:
        """Legs of an itinerary, in travel order."""
        start, end = self.network.path_start[itinerary], self.network.path_start[itinerary + 1]
        return tuple(int(leg) for leg in self.network.path_leg[start:end])

    def fare_of(self, itinerary: int, fare_class: int) -> float | None:
        """Fare of a product, None if the itinerary is not sold in the class."""
        network = self.network
        start, end = network.product_start[itinerary], network.product_start[itinerary + 1]
        at = start + int(np.searchsorted(network.product_class[start:end], fare_class))
        return float(network.fare[at]) if at < end and network.product_class[at] == fare_class else None

    def remaining(self, left: Mapping[str, int]) -> IntArray:
        """(L,) seats left now, from the counts by leg; those of the snapshot where a leg has none."""
        names, snapshot = self.network.legs.name, self.network.remaining
        counts = (left.get(name, int(then)) for name, then in zip(names, snapshot, strict=True))
        return np.fromiter(counts, np.int64, len(names))

    def answer(self, question: Question, left: Mapping[str, int], known_class: bool = True) -> dict[str, Any]:
        """Judge one question against the seats left, by leg name, just as `legworth.decisions.decide` does.

        Parameters
        ----------
        question
            What is asked.
        left
            Seats left on every leg of the path.
        known_class
            Whether the itinerary is sold in the fare class asked for, if one is.
        """
        weights = [
            self._weight(leg, left[name], question) for leg, name in zip(question.path, question.names, strict=True)
        ]
        reason, binding = self._reason(weights, question, known_class)
        priced = reason >= Reason.FARE_BELOW_PRICE
        prices = [price for _, price in weights] if priced else []
        displacement = _total(prices) if priced else None
        asked = None if question.fare is None else question.fare * question.seats
        words = {
            "binding": "" if binding is None else question.names[binding],
            "party": str(question.seats),
            "asked": "" if asked is None else _money(asked),
            "price": "" if displacement is None else _money(displacement),
            "prices": "+".join(map(_money, prices)),
        }
        return {
            "accepted": reason is Reason.FARE_REACHES_PRICE,
            "reason": reason.name.lower(),
            "itinerary": question.itinerary,
            "legs": list(question.names),
            "fare_class": question.fare_class,
            "fare": question.fare,
            "seats": question.seats,
            "displacement": displacement,
            "leg_prices": prices,
            "binding_leg": None if binding is None else question.names[binding],
            "seats_left": min((left[name] for name in question.names), default=0),
            "sentence": SENTENCES[reason].format(**words),
        }

    def _weight(self, leg: int, left: int, question: Question) -> tuple[int, float]:
        """How a leg stands in the way, worst first in order, and its price for the party."""
        days = (self._departs[leg] - question.moment) / DAY
        if days <= 0:
            return (4, 0.0)
        if left <= 0:
            return (3, 0.0)
        if left < question.seats:
            return (2, -float(left))
        price = self.prices.one_party_price(leg, days, left, question.seats)
        return (1, 0.0) if isnan(price) else (0, price)

    @staticmethod
    def _reason(weights: list[tuple[int, float]], question: Question, known_class: bool) -> tuple[Reason, int | None]:
        """The first reason that holds, and the leg that binds."""
        if not known_class:
            return Reason.UNKNOWN_PRODUCT, None
        if question.fare is None:
            return Reason.NO_FARE, None
        worst = max(weights)
        binding = weights.index(worst)
        obstacles = {4: Reason.DEPARTED, 3: Reason.NO_SEATS, 2: Reason.TOO_FEW_SEATS, 1: Reason.NO_PRICE}
        if worst[0] in obstacles:
            return obstacles[worst[0]], binding
        asked = question.fare * question.seats
        reached = asked >= _total([price for _, price in weights]) - EQUAL * abs(asked)
        return (Reason.FARE_REACHES_PRICE if reached else Reason.FARE_BELOW_PRICE), binding


def _total(prices: list[float]) -> float:
    """Sum of the prices of a path, to the last bit as `legworth.decisions.decide` adds them up."""
    return sum(prices) if len(prices) < 3 else float(np.add.reduceat(prices, [0])[0])


def _money(value: float) -> str:
    """Money with two decimals, rounded as `numpy.round` does for tables."""
    cents = round(value * 100)
    return f"{cents // 100}.{cents % 100:02d}"


def read_part(folder: Path, name: str) -> ServedPart:
    """Read a part folder of a published night.

    Raises
    ------
    InputError
        If its tables are at fault.
    """
    network = read_folder(folder).network
    part = ServedPart(name, network, read_prices(folder, network))
    part.prepare()
    return part
