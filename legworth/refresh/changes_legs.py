"""Departures of two nights: which prices moved, and which departures came, went or changed."""

from __future__ import annotations

from dataclasses import dataclass
from datetime import UTC, datetime

import numpy as np
import pandas as pd
import pyarrow as pa

from legworth.refresh.changes_nights import NightTables
from network.arrays import BoolArray, FloatArray, IntArray, NameArray, TimeArray

__all__ = ["NOISE", "AddedDate", "DepartureChanges", "LegMatch", "NightLegs", "departure_changes", "match_legs"]

NOISE = 1e-6
"""Share of the dearest price below which two prices are the same: what a certificate leaves open."""


@dataclass(frozen=True, eq=False)
class NightLegs:
    """Every leg of a night, (L,) each.

    Attributes
    ----------
    name, part
        Name of the leg and of its part.
    route
        Stations, such as ``ORV-SAL``.
    departs
        Instant in UTC, seconds.
    local
        Local departure for people, such as ``2027-03-01 06:45``.
    departed
        Whether it had left by the snapshot.
    capacity, sold, remaining
        Seats.
    bid_price
        Currency per seat.
    expected_sales
        Passengers still expected.
    """

    name: NameArray
    part: NameArray
    route: NameArray
    departs: TimeArray
    local: NameArray
    departed: BoolArray
    capacity: IntArray
    sold: IntArray
    remaining: IntArray
    bid_price: FloatArray
    expected_sales: FloatArray

    @classmethod
    def of(cls, night: NightTables, as_of: datetime) -> NightLegs:
        """Read the legs and their prices.

        Raises
        ------
        ValueError
            If a leg has no price, which a store never holds.
        """
        legs = night.table("legs", ["leg", "origin", "destination", "departs", "capacity", "sold"])
        prices = night.table("bid_prices", ["leg", "bid_price", "remaining", "expected_sales"])
        name = _words(legs["leg"])
        place = pd.Index(_words(prices["leg"])).get_indexer(pd.Index(name))
        if np.any(place < 0):
            raise ValueError(f"night {night.name}: leg {name[place < 0][0]} has no bid price")
        departs, local = _instants(legs["departs"])
        snapshot = np.datetime64(as_of.astimezone(UTC).replace(tzinfo=None), "s")
        return cls(
            name=name,
            part=_words(legs["part"]),
            route=_words(legs["origin"]) + "-" + _words(legs["destination"]),
            departs=departs,
            local=local,
            departed=departs <= snapshot,
            capacity=legs["capacity"].to_numpy().astype(np.int64),
            sold=legs["sold"].to_numpy().astype(np.int64),
            remaining=prices["remaining"].to_numpy()[place].astype(np.int64),
            bid_price=prices["bid_price"].to_numpy()[place].astype(np.float64),
            expected_sales=prices["expected_sales"].to_numpy()[place].astype(np.float64),
        )

    def __len__(self) -> int:
        return len(self.name)

    @property
    def date(self) -> NameArray:
        """(L,) local date of departure, such as ``2027-03-01``."""
        return np.asarray(pd.Series(self.local, dtype=object).str[:10].to_numpy(dtype=object))

    def as_table(self) -> pa.Table:
        """What product level needs to know of the legs."""
        return pa.table({"leg": self.name, "remaining": self.remaining, "departed": self.departed})


@dataclass(frozen=True, eq=False)
class LegMatch:
    """Legs still on sale tonight that stood in last night's tables too.

    Attributes
    ----------
    now, then
        (M,) positions in tonight's and in last night's legs.
    move
        (M,) bid price tonight less last night's, currency per seat; 0 within `NOISE`.
    money
        (M,) size of the move times the seats left, the greater number of both nights, currency.
    """

    now: IntArray
    then: IntArray
    move: FloatArray
    money: FloatArray

    @property
    def ranked(self) -> IntArray:
        """Positions in this match of the legs whose prices moved, most money first."""
        order = np.argsort(-self.money, kind="stable")
        return np.asarray(order[self.move[order] != 0])


def match_legs(tonight: NightLegs, last: NightLegs) -> LegMatch:
    """Match legs by name and compare their prices; those that have departed are left out."""
    place = pd.Index(last.name).get_indexer(pd.Index(tonight.name))
    now = np.flatnonzero((place >= 0) & ~tonight.departed)
    then = place[now]
    move = tonight.bid_price[now] - last.bid_price[then]
    dearest = max(float(tonight.bid_price.max(initial=0.0)), float(last.bid_price.max(initial=0.0)))
    move = np.where(np.abs(move) <= NOISE * dearest, 0.0, move)
    seats = np.maximum(tonight.remaining[now], last.remaining[then])
    return LegMatch(now, then, move, np.abs(move) * seats)


@dataclass(frozen=True)
class AddedDate:
    """Departures of one date that were added: how many, their seats, and what these are worth at their prices."""

    date: str
    legs: int
    seats: int
    worth: float


@dataclass(frozen=True, eq=False)
class DepartureChanges:
    """What became of departures.

    Attributes
    ----------
    added
        Positions tonight of legs on sale that last night did not have.
    gone
        Positions last night of legs that are missing tonight although they should not have departed yet.
    departed
        Positions last night of legs on sale then that have departed since.
    retimed, resized
        Positions in the match of legs that depart at another time, and that have another capacity.
    """

    added: IntArray
    gone: IntArray
    departed: IntArray
    retimed: IntArray
    resized: IntArray

    def added_by_date(self, tonight: NightLegs) -> list[AddedDate]:
        """Added departures by local date, earliest first."""
        frame = pd.DataFrame(
            {
                "date": tonight.date[self.added],
                "seats": tonight.remaining[self.added],
                "worth": (tonight.bid_price * tonight.remaining)[self.added],
            }
        )
        found = frame.groupby("date", sort=True).agg(
            legs=("seats", "size"), seats=("seats", "sum"), worth=("worth", "sum")
        )
        return [
            AddedDate(str(date), int(legs), int(seats), float(worth))
            for date, legs, seats, worth in found.itertuples(name=None)
        ]


def departure_changes(tonight: NightLegs, last: NightLegs, match: LegMatch, as_of: datetime) -> DepartureChanges:
    """Tell departures that came, went, left, or changed their time or size."""
    snapshot = np.datetime64(as_of.astimezone(UTC).replace(tzinfo=None), "s")
    place = pd.Index(tonight.name).get_indexer(pd.Index(last.name))
    listed = place >= 0
    has_left = np.where(
        listed, tonight.departed[np.where(listed, place, 0)] if len(tonight) else False, last.departs <= snapshot
    )
    known = pd.Index(last.name).get_indexer(pd.Index(tonight.name)) >= 0
    return DepartureChanges(
        added=np.flatnonzero(~known & ~tonight.departed),
        gone=np.flatnonzero(~listed & ~has_left & ~last.departed),
        departed=np.flatnonzero(has_left & ~last.departed),
        retimed=np.flatnonzero(tonight.departs[match.now] != last.departs[match.then]),
        resized=np.flatnonzero(tonight.capacity[match.now] != last.capacity[match.then]),
    )


def _words(values: pa.ChunkedArray) -> NameArray:
    return np.asarray(values.cast(pa.string()).to_pandas().to_numpy(dtype=object))


def _instants(values: pa.ChunkedArray) -> tuple[TimeArray, NameArray]:
    """Instants in UTC, and local time as text; a column without local offsets is shown in its own zone."""
    if pa.types.is_timestamp(values.type):
        stamps = values.to_pandas()
        local = stamps.dt.strftime("%Y-%m-%d %H:%M")
    else:
        text = values.cast(pa.string()).to_pandas().astype(object)
        stamps = pd.to_datetime(text, utc=True, format="ISO8601")
        local = text.str[:16].str.replace("T", " ")
    instants = stamps.dt.tz_convert("UTC").dt.tz_localize(None) if stamps.dt.tz is not None else stamps
    return instants.to_numpy().astype("datetime64[s]"), local.to_numpy(dtype=object)
