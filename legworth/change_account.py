"""What a change changes, read off the two networks themselves: seats, legs, itineraries, fares and demand by name."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from network import Network
from network.arrays import BoolArray, IntArray, NameArray

__all__ = ["CancelledLeg", "ChangeAccount", "FareMove", "NewLeg", "SeatsMove", "account_of_change", "matched_names"]


@dataclass(frozen=True)
class SeatsMove:
    """A leg with other seats: authorised for sale, and of these left to sell."""

    leg: str
    seats_before: int
    seats_after: int
    left_before: int
    left_after: int


@dataclass(frozen=True)
class CancelledLeg:
    """A leg that no longer runs: its seats, and how many of them are sold."""

    leg: str
    seats: int
    sold: int


@dataclass(frozen=True)
class NewLeg:
    """A leg that runs only after the change: its seats, and how many of them are left to sell."""

    leg: str
    seats: int
    left: int


@dataclass(frozen=True)
class FareMove:
    """A product with another fare, currency for one passenger."""

    itinerary: str
    fare_class: str
    fare_before: float
    fare_after: float


@dataclass(frozen=True)
class ChangeAccount:
    """What differs between two networks; legs and products are matched by name.

    Attributes
    ----------
    seats, cancelled, added, fares
        Legs with other seats, legs that no longer run, legs that are new, and products with other fares.
    legs_at_other_times
        Legs that depart or arrive at another instant, or between other stations.
    itineraries_lost, itineraries_added, itineraries_rerouted
        Itineraries that are sold only before, only after, and those that travel on other legs.
    products_lost, products_added
        Products of itineraries sold before and after that are sold only before, or only after.
    products_with_other_demand
        Products sold before and after whose demand to come has another mean, deviation or distribution.
    """

    seats: tuple[SeatsMove, ...]
    cancelled: tuple[CancelledLeg, ...]
    added: tuple[NewLeg, ...]
    fares: tuple[FareMove, ...]
    legs_at_other_times: int
    itineraries_lost: int
    itineraries_added: int
    itineraries_rerouted: int
    products_lost: int
    products_added: int
    products_with_other_demand: int

    @property
    def is_empty(self) -> bool:
        """True if nothing differs."""
        return not any(vars(self).values())


def account_of_change(before: Network, after: Network) -> ChangeAccount:
    """Say what differs between two networks."""
    old, new = matched_names(before.legs.name, after.legs.name)
    here, there = matched_names(before.itinerary, after.itinerary)
    sold_before, sold_after = _products(before, here), _products(after, there)
    _, place, later = np.intersect1d(*_common_keys(before, after, sold_before, sold_after), return_indices=True)
    one, other = sold_before[place], sold_after[later]
    return ChangeAccount(
        seats=_seats(before, after, old, new),
        cancelled=_cancelled(before, old),
        added=_added(after, new),
        fares=_fares(before, after, one, other),
        legs_at_other_times=int(_moved(before, after, old, new).sum()),
        itineraries_lost=before.n_itineraries - len(here),
        itineraries_added=after.n_itineraries - len(there),
        itineraries_rerouted=_rerouted(before, after, here, there),
        products_lost=len(sold_before) - len(one),
        products_added=len(sold_after) - len(other),
        products_with_other_demand=_other_demand(before, after, one, other),
    )


def matched_names(before: NameArray, after: NameArray) -> tuple[IntArray, IntArray]:
    """Positions of the names that stand in both, in each, in the order of the first."""
    _, old, new = np.intersect1d(before.astype(str), after.astype(str), return_indices=True)
    order = np.argsort(old)
    return old[order], new[order]


def _seats(before: Network, after: Network, old: IntArray, new: IntArray) -> tuple[SeatsMove, ...]:
    capacity, later = before.legs.capacity[old], after.legs.capacity[new]
    left, left_later = before.remaining[old], after.remaining[new]
    return tuple(
        SeatsMove(str(before.legs.name[old[n]]), int(capacity[n]), int(later[n]), int(left[n]), int(left_later[n]))
        for n in np.flatnonzero((capacity != later) | (left != left_later)).tolist()
    )


def _cancelled(before: Network, kept: IntArray) -> tuple[CancelledLeg, ...]:
    legs = before.legs
    return tuple(
        CancelledLeg(str(legs.name[leg]), int(legs.capacity[leg]), int(legs.sold[leg]))
        for leg in np.setdiff1d(np.arange(len(legs)), kept).tolist()
    )


def _added(after: Network, known: IntArray) -> tuple[NewLeg, ...]:
    legs = after.legs
    return tuple(
        NewLeg(str(legs.name[leg]), int(legs.capacity[leg]), int(after.remaining[leg]))
        for leg in np.setdiff1d(np.arange(len(legs)), known).tolist()
    )


def _moved(before: Network, after: Network, old: IntArray, new: IntArray) -> BoolArray:
    """Whether a leg that stands in both runs at another instant or between other stations."""
    moved = np.zeros(len(old), dtype=bool)
    for instant in ("departs", "arrives"):
        moved |= getattr(before.legs, instant)[old] != getattr(after.legs, instant)[new]
    for end in ("origin", "destination"):
        names = (network.stations.name[getattr(network.legs, end)] for network in (before, after))
        moved |= np.not_equal(*(each[at] for each, at in zip(names, (old, new), strict=True))).astype(bool)
    return moved


def _rerouted(before: Network, after: Network, here: IntArray, there: IntArray) -> int:
    """Itineraries that stand in both and travel on other legs."""
    length, later = np.diff(before.path_start)[here], np.diff(after.path_start)[there]
    alike = length == later
    most = int(length[alike].max(initial=0))
    same = alike.copy()
    for step in range(most):
        rows = np.flatnonzero(alike & (length > step))
        one = before.path_leg[before.path_start[here[rows]] + step]
        other = after.path_leg[after.path_start[there[rows]] + step]
        same[rows] &= before.legs.name[one] == after.legs.name[other]
    return int((~same).sum())


def _products(network: Network, itineraries: IntArray) -> IntArray:
    """Products of some itineraries."""
    return np.flatnonzero(np.isin(network.product_itinerary, itineraries))


def _common_keys(before: Network, after: Network, one: IntArray, other: IntArray) -> tuple[IntArray, IntArray]:
    """Whole numbers that are equal where products of two networks have the same itinerary and fare class."""
    itineraries = np.unique(np.concatenate([before.itinerary, after.itinerary]).astype(str))
    classes = np.unique([*before.fare_classes, *after.fare_classes])

    def keys(network: Network, products: IntArray) -> IntArray:
        itinerary = np.searchsorted(itineraries, network.itinerary.astype(str))[network.product_itinerary[products]]
        fare_class = np.searchsorted(classes, np.array(network.fare_classes, dtype=classes.dtype))
        key: IntArray = itinerary * len(classes) + fare_class[network.product_class[products]]
        return key

    return keys(before, one), keys(after, other)


def _fares(before: Network, after: Network, one: IntArray, other: IntArray) -> tuple[FareMove, ...]:
    moved = np.flatnonzero(before.fare[one] != after.fare[other])
    return tuple(
        FareMove(
            itinerary=str(before.itinerary[before.product_itinerary[one[n]]]),
            fare_class=before.fare_classes[before.product_class[one[n]]],
            fare_before=float(before.fare[one[n]]),
            fare_after=float(after.fare[other[n]]),
        )
        for n in moved.tolist()
    )


def _other_demand(before: Network, after: Network, one: IntArray, other: IntArray) -> int:
    differs = np.zeros(len(one), dtype=bool)
    for figure in ("mean", "deviation", "family"):
        differs |= getattr(before.demand, figure)[one] != getattr(after.demand, figure)[other]
    return int(differs.sum())
