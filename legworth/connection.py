"""Is a connection worth what it displaces? One itinerary, class by class and party by party, exactly."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from legworth.control import Connections, compare_controls
from legworth.pricing import PricingOptions
from lp import Method, SeatValues, Solution, solve
from network import Network, SettingError, components

__all__ = [
    "ClassLine",
    "ConnectionStudy",
    "Displaced",
    "PartyLine",
    "displaced_products",
    "itineraries_between",
    "itinerary_named",
    "study_connection",
]

MOST_DISPLACED = 12
"""Displaced products listed."""

NOTICED = 0.005
"""Passengers from which a displaced product is listed."""


@dataclass(frozen=True)
class ClassLine:
    """One fare class of the itinerary (columns as in the table ``connections``)."""

    fare_class: str
    fare: float
    displacement: float
    contribution: float
    open: bool
    open_by_leg_control: bool


@dataclass(frozen=True)
class PartyLine:
    """A party of ``seats``: what it displaces.

    Attributes
    ----------
    seats
        Passengers.
    displacement
        V(c) - V(c - n a), exact, currency for the party.
    least_fare
        The same for one passenger: the least fare worth accepting.
    by_bid_price
        Passengers times the sum of bid prices, currency for the party.
    """

    seats: int
    displacement: float
    least_fare: float
    by_bid_price: float


@dataclass(frozen=True)
class Displaced:
    """A product that the party displaces.

    Attributes
    ----------
    itinerary, fare_class, fare
        The product.
    legs
        Legs of the party's path that it uses; none where it moves for the sake of others.
    passengers
        Passengers fewer expected of it; below zero it gains.
    """

    itinerary: str
    fare_class: str
    fare: float
    legs: tuple[str, ...]
    passengers: float


@dataclass(frozen=True)
class ConnectionStudy:
    """All that is known of one itinerary.

    Attributes
    ----------
    itinerary, legs, remaining, bid_prices
        Name, legs of the path, and seats left and bid price of each.
    classes
        Every fare class.
    parties
        Parties of one and more.
    displaced, displaced_by
        Products with most passengers displaced by a party of ``displaced_by``; those that gain are listed
        with a negative figure.
    """

    itinerary: str
    legs: tuple[str, ...]
    remaining: tuple[int, ...]
    bid_prices: tuple[float, ...]
    classes: tuple[ClassLine, ...]
    parties: tuple[PartyLine, ...]
    displaced: tuple[Displaced, ...]
    displaced_by: int


def itineraries_between(network: Network, origin: str, destination: str) -> list[int]:
    """Positions of the itineraries of a city pair, in file order.

    Raises
    ------
    SettingError
        If a station is unknown or nothing is sold between the two.
    """
    for station in (origin, destination):
        if station not in network.stations.name:
            raise SettingError(f"there is no station {station!r}; see stations.csv")
    first = network.path_leg[network.path_start[:-1]]
    last = network.path_leg[network.path_start[1:] - 1]
    names = network.stations.name
    fits = (names[network.legs.origin[first]] == origin) & (names[network.legs.destination[last]] == destination)
    found = [int(position) for position in np.flatnonzero(fits)]
    if not found:
        raise SettingError(f"nothing is sold from {origin} to {destination}; see itineraries.csv")
    return found


def itinerary_named(network: Network, name: str) -> int:
    """Position of an itinerary.

    Raises
    ------
    SettingError
        If there is none of that name.
    """
    found = np.flatnonzero(network.itinerary == name)
    if not len(found):
        raise SettingError(f"there is no itinerary {name!r}; see itineraries.csv")
    return int(found[0])


def study_connection(
    network: Network, itineraries: list[int], sizes: list[int], options: PricingOptions
) -> list[ConnectionStudy]:
    """Study itineraries, given by position, for parties of the given sizes.

    Parties larger than the seats left on a path are left out.

    Raises
    ------
    SettingError
        If the method is the randomised program, which has no exact values.
    SolveError
        If there is no certified optimum.
    """
    if options.lp.method is Method.RANDOMISED:
        raise SettingError("exact displacement needs one program; choose --method probabilistic or deterministic")
    studies = []
    for piece in components(network):
        place = {int(whole): part for part, whole in enumerate(piece.itineraries)}
        inside = [position for position in itineraries if position in place]
        if not inside:
            continue
        solution = solve(piece.network, options.lp)
        values = SeatValues.of(piece.network, options.lp, solution.bid_price)
        controls = compare_controls(piece.network, solution.bid_price, options.legs)
        studies += [
            (position, _study(place[position], sizes, solution, values, controls.connections)) for position in inside
        ]
    return [study for _, study in sorted(studies, key=lambda pair: itineraries.index(pair[0]))]


def _study(
    itinerary: int, sizes: list[int], solution: Solution, values: SeatValues, connections: Connections
) -> ConnectionStudy:
    network = values.program.network
    path = network.path_leg[network.path_start[itinerary] : network.path_start[itinerary + 1]]
    price = float(solution.bid_price[path].sum())
    parties, without = [], None
    for size in sorted(sizes):
        if size <= network.path_remaining[itinerary]:
            without = values.without_party(itinerary, size)
            displacement = values.present.value - without.value
            parties.append(PartyLine(size, displacement, displacement / size, size * price))
    products = range(int(network.product_start[itinerary]), int(network.product_start[itinerary + 1]))
    fewer = np.zeros(network.n_products) if without is None else values.present.sales - without.sales
    return ConnectionStudy(
        itinerary=str(network.itinerary[itinerary]),
        legs=tuple(str(name) for name in network.legs.name[path]),
        remaining=tuple(int(seats) for seats in network.remaining[path]),
        bid_prices=tuple(float(value) for value in solution.bid_price[path]),
        classes=tuple(
            ClassLine(
                fare_class=network.fare_classes[network.product_class[product]],
                fare=float(network.fare[product]),
                displacement=float(connections.displacement[product]),
                contribution=float(connections.contribution[product]),
                open=bool(connections.open[product]),
                open_by_leg_control=bool(connections.open_by_leg_control[product]),
            )
            for product in products
        ),
        parties=tuple(parties),
        displaced=displaced_products(network, set(path.tolist()), fewer),
        displaced_by=parties[-1].seats if parties else 0,
    )


def displaced_products(network: Network, path: set[int], fewer: np.ndarray) -> tuple[Displaced, ...]:
    """Products with the greatest change in expected passengers, most displaced first.

    Parameters
    ----------
    network
        The network.
    path
        Positions of the legs that the party takes; those that a product shares are named.
    fewer
        (J,) passengers that every product loses, negative where it gains.
    """
    greatest = np.argsort(-np.abs(fewer), kind="stable")[:MOST_DISPLACED]
    chosen = sorted((p for p in greatest.tolist() if abs(fewer[p]) >= NOTICED), key=lambda p: -fewer[p])
    rows = []
    for product in chosen:
        i = network.product_itinerary[product]
        legs = network.path_leg[network.path_start[i] : network.path_start[i + 1]].tolist()
        shared = tuple(str(network.legs.name[leg]) for leg in legs if leg in path)
        rows.append(
            Displaced(
                itinerary=str(network.itinerary[i]),
                fare_class=network.fare_classes[network.product_class[product]],
                fare=float(network.fare[product]),
                legs=shared,
                passengers=float(fewer[product]),
            )
        )
    return tuple(rows)
