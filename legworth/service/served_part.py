"""One part of a night as the service uses it: the network, its prices, and answers against the seats left now."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from functools import cached_property
from math import isnan
from pathlib import Path
from typing import Any

import numpy as np

from heuristics.arrivals import DAY
from legworth.control import EQUAL
from legworth.decisions import SENTENCES, Reason
from legworth.price_table import PriceTable, read_prices
from network import Network, read_folder
from network.arrays import IntArray

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
        displacement = sum(prices) if priced else None
        asked = None if question.fare is None else question.fare * question.seats
        words = {
            "binding": "" if binding is None else question.names[binding],
            "party": str(question.seats),
            "asked": "" if asked is None else f"{asked:.2f}",
            "price": "" if displacement is None else f"{displacement:.2f}",
            "prices": "+".join(f"{price:.2f}" for price in prices),
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
        reached = asked >= sum(price for _, price in weights) - EQUAL * abs(asked)
        return (Reason.FARE_REACHES_PRICE if reached else Reason.FARE_BELOW_PRICE), binding


def read_part(folder: Path, name: str) -> ServedPart:
    """Read a part folder of a published night.

    Raises
    ------
    InputError
        If its tables are at fault.
    """
    network = read_folder(folder).network
    return ServedPart(name, network, read_prices(folder, network))
