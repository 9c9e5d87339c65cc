"""`Network`: what is sold, as immutable arrays whose order is fixed once.

Everything downstream works by position in these arrays; names come back only in result tables.
Legs and itineraries stand in the order of their tables. Products are sorted by itinerary, then by
fare class, so the products of itinerary ``i`` are ``product_start[i]:product_start[i + 1]``.
"""

from __future__ import annotations

from dataclasses import dataclass, fields, is_dataclass, replace
from datetime import datetime
from functools import cached_property

import numpy as np
from scipy.sparse import csr_array

from network.arrays import FloatArray, IntArray, NameArray, TimeArray
from network.demand import Demand

__all__ = ["BookingCurves", "Legs", "Network", "Stations", "ranges"]


def _freeze(record: object) -> None:
    """Make every array of a dataclass read-only."""
    assert is_dataclass(record)
    for field in fields(record):
        value = getattr(record, field.name)
        if isinstance(value, np.ndarray):
            value.flags.writeable = False


def _freeze_table(record: object) -> None:
    """Make every array read-only; ValueError unless all are as long as ``name``."""
    assert is_dataclass(record)
    lengths = {field.name: len(getattr(record, field.name)) for field in fields(record)}
    for label, found in lengths.items():
        if found != lengths["name"]:
            raise ValueError(f"{label} has length {found}, expected {lengths['name']}")
    _freeze(record)


def _check_positions(label: str, values: IntArray, end: int, least: int = 0) -> None:
    """ValueError unless whole numbers from ``least`` to ``end`` - 1."""
    if not np.issubdtype(values.dtype, np.integer):
        raise ValueError(f"{label} must hold whole numbers, not {values.dtype}")
    if len(values) and not (values.min() >= least and values.max() < end):
        raise ValueError(f"{label} must lie from {least} to {end - 1}")


@dataclass(frozen=True, eq=False)
class Stations:
    """Stations by position: names, coordinates (degrees, NaN if unknown), connection minutes."""

    name: NameArray
    label: NameArray
    latitude: FloatArray
    longitude: FloatArray
    minimum_connection: FloatArray

    def __post_init__(self) -> None:
        _freeze_table(self)

    def __len__(self) -> int:
        return len(self.name)


@dataclass(frozen=True, eq=False)
class Legs:
    """Legs by position.

    ``origin`` and ``destination`` are station positions; ``departs`` and ``arrives`` are instants in
    UTC (seconds) with the local offset of each in ``departs_offset`` and ``arrives_offset`` (minutes);
    ``capacity`` and ``sold`` are seats.
    """

    name: NameArray
    origin: IntArray
    destination: IntArray
    departs: TimeArray
    arrives: TimeArray
    departs_offset: IntArray
    arrives_offset: IntArray
    capacity: IntArray
    sold: IntArray

    def __post_init__(self) -> None:
        _freeze_table(self)

    def __len__(self) -> int:
        return len(self.name)


@dataclass(frozen=True, eq=False)
class BookingCurves:
    """Booking curves: for curve ``q`` the share of demand arrived by each of its reading days.

    Curve ``q`` owns rows ``start[q]:start[q + 1]`` of ``days_before`` (falling) and ``share`` (rising to 1).
    """

    name: NameArray
    start: IntArray
    days_before: FloatArray
    share: FloatArray

    def __post_init__(self) -> None:
        rows = int(self.start[-1])
        if len(self.start) != len(self.name) + 1 or len(self.days_before) != rows or len(self.share) != rows:
            raise ValueError("names, starts and rows of the booking curves do not fit each other")
        _freeze(self)

    def __len__(self) -> int:
        return len(self.name)


@dataclass(frozen=True, eq=False)
class Network:
    """One network, checked and immutable.

    Attributes
    ----------
    name, currency, as_of
        From ``network.toml``; ``as_of`` is the instant of the snapshot.
    stations, legs
        `Stations` and `Legs` by position.
    remaining
        (L,) seats still for sale per leg, never negative; 0 where the leg has departed by ``as_of``.
    itinerary
        (I,) itinerary names.
    path_start, path_leg
        Legs of itinerary ``i`` in travel order: ``path_leg[path_start[i]:path_start[i + 1]]``.
    fare_classes
        Names of the fare classes, best first.
    product_itinerary, product_class
        (J,) position of the itinerary (int32 as read from a folder) and of the fare class (as few bits as hold it) of
        every product, sorted by both.
    fare
        (J,) currency per passenger, net to the carrier.
    demand
        `Demand` to come of the J products.
    curve, curves
        (J,) position of the booking curve of every product, -1 where it has none, and the curves.
    """

    name: str
    currency: str
    as_of: datetime
    stations: Stations
    legs: Legs
    remaining: IntArray
    itinerary: NameArray
    path_start: IntArray
    path_leg: IntArray
    fare_classes: tuple[str, ...]
    product_itinerary: IntArray
    product_class: IntArray
    fare: FloatArray
    demand: Demand
    curve: IntArray
    curves: BookingCurves

    def __post_init__(self) -> None:
        n_legs, n_itineraries, n_products = len(self.legs), len(self.itinerary), len(self.fare)
        sizes = {
            "remaining": (len(self.remaining), n_legs),
            "path_start": (len(self.path_start), n_itineraries + 1),
            "path_leg": (len(self.path_leg), int(self.path_start[-1])),
            "product_itinerary": (len(self.product_itinerary), n_products),
            "product_class": (len(self.product_class), n_products),
            "demand": (len(self.demand), n_products),
            "curve": (len(self.curve), n_products),
        }
        for label, (found, wanted) in sizes.items():
            if found != wanted:
                raise ValueError(f"{label} has length {found}, expected {wanted}")
        if self.path_start[0] != 0 or np.any(np.diff(self.path_start) < 1):
            raise ValueError("every itinerary needs at least one leg, the first from position 0 on")
        _check_positions("path_leg", self.path_leg, n_legs)
        _check_positions("product_itinerary", self.product_itinerary, n_itineraries)
        _check_positions("product_class", self.product_class, len(self.fare_classes))
        _check_positions("curve", self.curve, len(self.curves), least=-1)
        _check_positions("remaining", self.remaining, np.iinfo(np.int64).max)
        itinerary, fare_class = self.product_itinerary, self.product_class
        rises = (itinerary[1:] == itinerary[:-1]) & (fare_class[1:] > fare_class[:-1])
        if not np.all(rises | (itinerary[1:] > itinerary[:-1])):
            raise ValueError("products must be sorted by itinerary and fare class, without duplicates")
        if not np.all(np.isfinite(self.fare)) or np.any(self.fare < 0):
            raise ValueError("fares must be finite and not negative")
        _freeze(self)

    @property
    def n_legs(self) -> int:
        """Number of legs L."""
        return len(self.legs)

    @property
    def n_itineraries(self) -> int:
        """Number of itineraries I."""
        return len(self.itinerary)

    @property
    def n_products(self) -> int:
        """Number of products J."""
        return len(self.fare)

    @cached_property
    def incidence(self) -> csr_array:
        """(L, I) sparse matrix: 1 where the leg belongs to the itinerary."""
        itinerary = np.repeat(np.arange(self.n_itineraries), np.diff(self.path_start))
        ones = np.ones(len(self.path_leg))
        return csr_array((ones, (self.path_leg, itinerary)), shape=(self.n_legs, self.n_itineraries))

    @cached_property
    def transposed(self) -> csr_array:
        """(I, L) sparse matrix: the transpose of ``incidence``."""
        return csr_array(self.incidence.T)

    @cached_property
    def product_start(self) -> IntArray:
        """(I + 1,) where the products of each itinerary begin."""
        return np.searchsorted(self.product_itinerary, np.arange(self.n_itineraries + 1))

    @cached_property
    def path_remaining(self) -> IntArray:
        """(I,) seats that the whole path of each itinerary still has: the least over its legs."""
        if self.n_itineraries == 0:
            return np.zeros(0, dtype=self.remaining.dtype)
        return np.minimum.reduceat(self.remaining[self.path_leg], self.path_start[:-1])

    def path_sum(self, per_leg: FloatArray) -> FloatArray:
        """Sum a figure per leg, (L,), over the path of every itinerary, giving (I,)."""
        if per_leg.shape != (self.n_legs,):
            raise ValueError(f"expected one figure for each of {self.n_legs} legs, got {per_leg.shape}")
        if self.n_itineraries == 0:
            return np.zeros(0)
        return np.add.reduceat(per_leg[self.path_leg], self.path_start[:-1])

    def displacement(self, bid_prices: FloatArray) -> FloatArray:
        """Sum of the bid prices, (L,), of the path of every product, giving (J,)."""
        return self.path_sum(bid_prices)[self.product_itinerary]

    def leg_load(self, per_product: FloatArray) -> FloatArray:
        """Sum a figure per product, (J,), over the products of every leg, giving (L,)."""
        if per_product.shape != (self.n_products,):
            raise ValueError(f"expected one figure for each of {self.n_products} products")
        carried = np.bincount(self.product_itinerary, weights=per_product, minlength=self.n_itineraries)
        return np.asarray(self.incidence @ carried)

    def with_remaining(self, remaining: IntArray) -> Network:
        """Return the same network with other remaining seats, (L,)."""
        return replace(self, remaining=np.array(remaining))

    def subnetwork(self, legs: IntArray, itineraries: IntArray) -> Network:
        """Cut out some legs and itineraries, given as rising positions.

        Every itinerary must run on the chosen legs alone; stations and curves are kept whole.
        """
        legs, itineraries = np.asarray(legs), np.asarray(itineraries)
        # Work by what is cut out alone, for a year is cut into hundreds of parts.
        length = self.path_start[itineraries + 1] - self.path_start[itineraries]
        path_start = np.concatenate([[0], np.cumsum(length)])
        whole_path = self.path_leg[ranges(self.path_start[itineraries], length)]
        path_leg = np.searchsorted(legs, whole_path).astype(self.path_leg.dtype)
        if np.any(np.append(legs, -1)[path_leg] != whole_path):
            raise ValueError("an itinerary leaves the chosen legs")
        count = self.product_start[itineraries + 1] - self.product_start[itineraries]
        products = ranges(self.product_start[itineraries], count)
        chosen = {f.name: getattr(self.legs, f.name)[legs] for f in fields(self.legs)}
        return replace(
            self,
            legs=Legs(**chosen),
            remaining=self.remaining[legs],
            itinerary=self.itinerary[itineraries],
            path_start=path_start,
            path_leg=path_leg,
            product_itinerary=np.repeat(np.arange(len(itineraries), dtype=self.product_itinerary.dtype), count),
            product_class=self.product_class[products],
            fare=self.fare[products],
            demand=self.demand.take(products),
            curve=self.curve[products],
        )


def ranges(start: IntArray, length: IntArray) -> IntArray:
    """Concatenate ``arange(start[i], start[i] + length[i])`` over i."""
    ends = np.cumsum(length)
    total = int(ends[-1]) if len(ends) else 0
    first: IntArray = np.repeat(start - (ends - length), length)
    return np.arange(total) + first
