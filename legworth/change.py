"""What a change is worth: the network priced again with other seats, fares or legs, exactly."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from heuristics.arrivals import days_before_departure
from lp import LpOptions, Method, NetworkSolution, solve_network
from network import Network, SettingError
from network.arrays import FloatArray, IntArray

__all__ = ["Change", "ChangeStudy", "LegMove", "changed_network", "parse_changes", "study_change"]

MOST_MOVED = 10


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


@dataclass(frozen=True)
class LegMove:
    """A leg whose bid price or expected passengers move."""

    leg: str
    price_before: float
    price_after: float
    sales_before: float
    sales_after: float


@dataclass(frozen=True)
class ChangeStudy:
    """Before and after.

    Attributes
    ----------
    before, after
        Optimum of the linear program, currency.
    moves
        Legs whose prices move most.
    lost_itineraries
        Itineraries that can no longer be sold.
    freed
        Passengers whom lost itineraries would have carried on other legs, by leg, most first; seats that the
        optimum after the change has for others.
    """

    before: float
    after: float
    moves: tuple[LegMove, ...]
    lost_itineraries: int
    freed: tuple[tuple[str, float], ...]


def parse_changes(seats: tuple[str, ...], cancel: tuple[str, ...], fares: tuple[str, ...]) -> list[Change]:
    """Read changes as typed: ``LEG=+20``, ``LEG``, ``ITINERARY/CLASS=120``.

    Raises
    ------
    SettingError
        If one does not read so.
    """
    found = [Change("cancel", (leg,), 0.0) for leg in cancel]
    for text in seats:
        leg, _, number = text.rpartition("=")
        found.append(Change("seats", (leg,), _number(number, text, "LEG=+20 or LEG=-20", whole=True)))
        if not leg:
            raise SettingError(f"cannot read {text!r}; write LEG=+20 or LEG=-20")
    for text in fares:
        product, _, number = text.rpartition("=")
        itinerary, _, fare_class = product.rpartition("/")
        found.append(Change("fare", (itinerary, fare_class), _number(number, text, "ITINERARY/CLASS=120")))
        if not itinerary or found[-1].amount < 0:
            raise SettingError(f"cannot read {text!r}; write ITINERARY/CLASS=120, not below zero")
    return found


def _number(number: str, text: str, shape: str, *, whole: bool = False) -> float:
    try:
        value = float(number)
    except ValueError:
        value = float("nan")
    if not np.isfinite(value) or (whole and value != round(value)):
        raise SettingError(f"cannot read {text!r}; write {shape}")
    return value


def changed_network(network: Network, changes: list[Change]) -> Network:
    """Return the network with changed seats, cancelled legs and changed fares.

    Raises
    ------
    SettingError
        If a leg, itinerary or fare class is unknown, or a leg would have fewer seats than none.
    """
    capacity = network.legs.capacity.copy()
    fare = network.fare.copy()
    cancelled: list[int] = []
    for change in changes:
        if change.kind == "fare":
            fare[_product(network, *change.target)] = change.amount
            continue
        leg = _leg(network, change.target[0])
        if change.kind == "cancel":
            cancelled.append(leg)
            continue
        if days_before_departure(network)[leg] <= 0:
            raise SettingError(f"{change.target[0]} has departed; its seats cannot change")
        capacity[leg] += int(change.amount)
        if change.amount < 0 and capacity[leg] < network.legs.sold[leg]:
            left = network.remaining[leg]
            raise SettingError(f"{change.target[0]} has {left} seats left; {-change.amount:.0f} cannot be taken away")
    moved = capacity != network.legs.capacity
    remaining = np.where(moved, np.maximum(capacity - network.legs.sold, 0), network.remaining)
    legs = replace(network.legs, capacity=capacity)
    network = replace(network, legs=legs, remaining=remaining, fare=fare)
    if not cancelled:
        return network
    kept = np.setdiff1d(np.arange(network.n_legs), cancelled)
    hit = network.path_sum(np.isin(np.arange(network.n_legs), cancelled).astype(np.float64)) > 0
    return network.subnetwork(kept, np.flatnonzero(~hit))


def study_change(before: Network, after: Network, options: LpOptions, jobs: int = 1) -> ChangeStudy:
    """Price two networks and say what moved; legs and itineraries are matched by name.

    Raises
    ------
    SettingError
        If the currencies differ, or the method is the randomised program, whose draws would differ.
    SolveError
        If either has no certified optimum.
    """
    if options.method is Method.RANDOMISED:
        raise SettingError("a change needs one program; choose --method probabilistic or deterministic")
    if before.currency != after.currency:
        raise SettingError(f"the folders are in {before.currency} and {after.currency}; give both in one currency")
    old = solve_network(before, options, jobs=jobs)
    kept, place = _matched(before.legs.name, after.legs.name)
    start = np.zeros(after.n_legs)
    start[place] = old.bid_price[kept]
    new = solve_network(after, options, start=start, jobs=jobs)
    lost = np.setdiff1d(np.arange(before.n_itineraries), _matched(before.itinerary, after.itinerary)[0])
    return ChangeStudy(
        before=old.objective,
        after=new.objective,
        moves=_moves(before, old, new, kept, place),
        lost_itineraries=len(lost),
        freed=_freed(before, old, lost, kept),
    )


def _matched(before: np.ndarray, after: np.ndarray) -> tuple[IntArray, IntArray]:
    """Positions of the names that stand in both, in each."""
    _, old, new = np.intersect1d(before.astype(str), after.astype(str), return_indices=True)
    order = np.argsort(old)
    return old[order], new[order]


def _moves(
    before: Network, old: NetworkSolution, new: NetworkSolution, kept: IntArray, place: IntArray
) -> tuple[LegMove, ...]:
    change = np.abs(new.bid_price[place] - old.bid_price[kept])
    greatest = np.argsort(-change, kind="stable")[:MOST_MOVED]
    return tuple(
        LegMove(
            leg=str(before.legs.name[kept[n]]),
            price_before=float(old.bid_price[kept[n]]),
            price_after=float(new.bid_price[place[n]]),
            sales_before=float(old.expected_sales[kept[n]]),
            sales_after=float(new.expected_sales[place[n]]),
        )
        for n in greatest.tolist()
        if change[n] > 1e-9 * max(float(np.abs(old.bid_price).max(initial=0.0)), 1.0)
    )


def _freed(before: Network, old: NetworkSolution, lost: IntArray, kept: IntArray) -> tuple[tuple[str, float], ...]:
    """Expected passengers of lost itineraries on the legs that remain."""
    sales = np.where(np.isin(before.product_itinerary, lost), old.sales, 0.0)
    load: FloatArray = before.leg_load(sales)
    shown = [leg for leg in np.argsort(-load, kind="stable")[:MOST_MOVED].tolist() if load[leg] > 0 and leg in kept]
    return tuple((str(before.legs.name[leg]), float(load[leg])) for leg in shown)


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
