"""Changes as typed, and the network with them: other seats, cancelled legs, other fares."""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from heuristics.arrivals import days_before_departure
from network import Network, SettingError, counted, input_schemas
from network.arrays import IntArray
from network.cells import NUMBER

__all__ = ["Change", "changed_network", "parse_changes"]

SEATS = re.compile(r"(?P<leg>\S+)=(?P<number>[+-]?[0-9]{1,20})")
FARE = re.compile(rf"(?P<itinerary>.+)/(?P<fare_class>[^/]+)=(?P<number>{NUMBER})")


@dataclass(frozen=True)
class Change:
    """One change.

    Attributes
    ----------
    kind
        ``seats`` (more or fewer on a leg), ``cancel`` (a leg) or ``fare`` (of a product).
    target
        Leg, or itinerary and fare class.
    amount
        Seats more (below zero: fewer), or the new fare; 0 for a cancelled leg.
    """

    kind: str
    target: tuple[str, ...]
    amount: float


def parse_changes(seats: Sequence[str], cancel: Sequence[str], fares: Sequence[str]) -> list[Change]:
    """Read changes as typed: ``LEG=+20`` or ``LEG=-20``, ``LEG``, ``ITINERARY/CLASS=120``.

    A number of seats needs its sign: ``LEG=20`` could as well mean twenty seats in all.

    Raises
    ------
    SettingError
        If one does not read so, or two of them name the same leg or product.
    """
    found = [Change("cancel", (leg,), 0.0) for leg in dict.fromkeys(cancel)]
    found += [_seats(text) for text in seats]
    found += [_fare(text) for text in fares]
    _refuse_contradictions(found)
    return found


def _seats(text: str) -> Change:
    read = SEATS.fullmatch(text)
    if read is None:
        raise SettingError(f"--seats {text!r} cannot be read; write LEG=+20 or LEG=-20")
    leg, number = read["leg"], read["number"]
    if number[0] not in "+-":
        raise SettingError(
            f"--seats {text!r} does not say whether seats are added or taken away; write {leg}=+{number} for "
            f"{number} more or {leg}=-{number} for {number} fewer"
        )
    return Change("seats", (leg,), float(number))


def _fare(text: str) -> Change:
    read = FARE.fullmatch(text)
    if read is None:
        raise SettingError(f"--fare {text!r} cannot be read; write ITINERARY/CLASS=120")
    fare, column = float(read["number"]), input_schemas()["fares"].column("fare")
    if not 0 <= fare <= (column.maximum or np.inf):
        raise SettingError(f"--fare {text!r} is outside its limits; a fare must be {column.limits}")
    return Change("fare", (read["itinerary"], read["fare_class"]), fare)


def _refuse_contradictions(changes: list[Change]) -> None:
    """Raise if a leg or a product is changed in two ways."""
    first: dict[tuple[str, ...], Change] = {}
    for change in changes:
        earlier = first.setdefault(change.target, change)
        if earlier is change:
            continue
        name = "/".join(change.target)
        if earlier.kind == change.kind:
            raise SettingError(f"--{change.kind} names {name} more than once; give one figure")
        raise SettingError(f"--{change.kind} {name} and --{earlier.kind} {name} contradict each other; leave one out")


def changed_network(network: Network, changes: list[Change]) -> Network:
    """Return the network with changed seats, cancelled legs and changed fares.

    Raises
    ------
    SettingError
        If a leg, itinerary or fare class is unknown, a leg has departed, a leg would have fewer seats than none or
        more than a table may say, or a changed fare is that of an itinerary which a cancelled leg takes away.
    """
    capacity = network.legs.capacity.copy()
    fare = network.fare.copy()
    departed = days_before_departure(network) <= 0
    cancelled, repriced = [], []
    for change in changes:
        if change.kind == "fare":
            repriced.append(_product(network, *change.target))
            fare[repriced[-1]] = change.amount
            continue
        name = change.target[0]
        leg = _leg(network, name)
        if departed[leg]:
            cannot = "it cannot be cancelled" if change.kind == "cancel" else "its seats cannot change"
            raise SettingError(f"{name} has departed; {cannot}")
        if change.kind == "cancel":
            cancelled.append(leg)
        else:
            capacity[leg] = _capacity(network, leg, change)
    moved = capacity != network.legs.capacity
    remaining = np.where(moved, np.maximum(capacity - network.legs.sold, 0), network.remaining)
    legs = replace(network.legs, capacity=capacity)
    network = replace(network, legs=legs, remaining=remaining, fare=fare)
    return _without_legs(network, np.array(cancelled), repriced) if cancelled else network


def _capacity(network: Network, leg: int, change: Change) -> int:
    """Seats of a leg after a change of seats."""
    capacity = int(network.legs.capacity[leg]) + int(change.amount)
    if change.amount < 0 and capacity < network.legs.sold[leg]:
        left = counted(network.remaining[leg], "seat")
        raise SettingError(f"{change.target[0]} has {left} left; {-change.amount:,.0f} cannot be taken away")
    column = input_schemas()["legs"].column("capacity")
    if capacity > (column.maximum or np.inf):
        raise SettingError(f"{change.target[0]} would have {capacity:,} seats; a capacity must be {column.limits}")
    return capacity


def _without_legs(network: Network, cancelled: IntArray, repriced: list[int]) -> Network:
    """Take legs out, and with them every itinerary that uses one."""
    gone = np.isin(np.arange(network.n_legs), cancelled)
    hit = network.path_sum(gone.astype(np.float64)) > 0
    for product in repriced:
        at = network.product_itinerary[product]
        if hit[at]:
            path = network.path_leg[network.path_start[at] : network.path_start[at + 1]]
            leg = network.legs.name[path[gone[path]][0]]
            raise SettingError(
                f"--fare of {network.itinerary[at]} and --cancel {leg} contradict each other, since the itinerary "
                "travels on that leg; leave one out"
            )
    return network.subnetwork(np.flatnonzero(~gone), np.flatnonzero(~hit))


def _leg(network: Network, name: str) -> int:
    found = np.flatnonzero(network.legs.name == name)
    if not len(found):
        raise SettingError(f"there is no leg {name!r}; see legs.csv")
    return int(found[0])


def _product(network: Network, itinerary: str, fare_class: str) -> int:
    at = np.flatnonzero(network.itinerary == itinerary)
    if not len(at):
        raise SettingError(f"there is no itinerary {itinerary!r}; see itineraries.csv")
    if fare_class in network.fare_classes:
        products = np.arange(network.product_start[at[0]], network.product_start[at[0] + 1])
        wanted = network.fare_classes.index(fare_class)
        for product in products[network.product_class[products] == wanted].tolist():
            return int(product)
    raise SettingError(f"{itinerary} is not sold in class {fare_class!r}; see fares.csv")
