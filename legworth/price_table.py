"""Prices in force: what a seat of a leg costs, by seats left and days before departure, looked up in bulk."""

from __future__ import annotations

import json
from bisect import bisect_right
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path

import numpy as np

from network import InputError, Network, SettingError, counted
from network.arrays import FloatArray, IntArray
from network.faults import Faults
from network.reading import TableData, read_table
from network.routes import positions
from network.schema import table_schema

__all__ = ["PriceTable", "prices_made_for", "read_prices"]


@dataclass(frozen=True, eq=False)
class PriceTable:
    """Prices of all legs of a network.

    Attributes
    ----------
    bid_price
        (L,) plain bid prices, currency; NaN where a leg has none.
    first_block
        (L + 1,) blocks of leg l are ``first_block[l]:first_block[l + 1]``, days falling; empty without curves.
    days
        (B,) days before departure from which a block is in force.
    first_seat
        (B + 1,) where the prices of each block begin, for one seat left, two seats left, and so on.
    price
        (N,) currency.
    """

    bid_price: FloatArray
    first_block: IntArray
    days: FloatArray
    first_seat: IntArray
    price: FloatArray

    @property
    def has_curves(self) -> bool:
        """Whether any price depends on seats left and days before departure."""
        return len(self.price) > 0

    def party_price(self, leg: IntArray, days: FloatArray, remaining: IntArray, party: IntArray) -> FloatArray:
        """Price of ``party`` seats on a leg, one sold after the other, currency.

        With price curves the last of ``remaining`` seats goes first, then the one before it, and so on; with
        plain bid prices every seat costs the same. Seats beyond those that the curve knows cost what its
        last one does, which is at least their worth; a leg without curve is priced by its bid price.

        Parameters
        ----------
        leg, days, remaining, party
            (m,) legs, days before departure, seats left, at least ``party``, and passengers, at least 1.
        """
        plain = self.bid_price[leg] * party
        if not self.has_curves:
            return np.asarray(plain)
        block = self._block(leg, days)
        known = block >= 0
        total = plain.astype(np.float64)
        start, end = self.first_seat[block[known]], self.first_seat[block[known] + 1]
        surplus = np.clip(start + remaining[known] - end, 0, party[known])
        last = np.minimum(start + remaining[known], end)
        begin = np.maximum(last - (party[known] - surplus), start)
        total[known] = self._sums[last] - self._sums[begin] + surplus * self.price[end - 1]
        single = np.flatnonzero(known)[party[known] == 1]
        total[single] = self.price[last[party[known] == 1] - 1]
        return total

    def one_party_price(self, leg: int, days: float, remaining: int, party: int) -> float:
        """Price of one party on one leg: `party_price` without arrays, for an answer while somebody waits."""
        begin, end = self._blocks_of[leg], self._blocks_of[leg + 1]
        if begin == end:
            return float(self.bid_price[leg]) * party
        # Days fall within a leg: the block in force is the last whose days are not below the present ones.
        block = max(bisect_right(self._falling_days, -days, begin, end) - 1, begin)
        start, stop = self._seats_of[block], self._seats_of[block + 1]
        surplus = min(max(start + remaining - stop, 0), party)
        last = min(start + remaining, stop)
        if party == 1:
            return float(self.price[last - 1])
        first = max(last - (party - surplus), start)
        return float(self._sums[last] - self._sums[first] + surplus * self.price[stop - 1])

    @cached_property
    def _blocks_of(self) -> list[int]:
        return [int(block) for block in self.first_block]

    @cached_property
    def _seats_of(self) -> list[int]:
        return [int(seat) for seat in self.first_seat]

    @cached_property
    def _falling_days(self) -> list[float]:
        return [-float(days) for days in self.days]

    def _block(self, leg: IntArray, days: FloatArray) -> IntArray:
        """(m,) block in force, -1 for a leg without curve."""
        begin, end = self.first_block[leg], self.first_block[leg + 1]
        # Days fall within a leg: the block in force is the last whose days are not below the present ones.
        found = np.searchsorted(self._key, leg * self._span - np.clip(days, 0.0, self._span / 2), side="right") - 1
        return np.where(end > begin, np.clip(found, begin, np.maximum(end - 1, begin)), -1)

    @cached_property
    def _span(self) -> float:
        """Twice the farthest day: keys of different legs do not overlap."""
        return 2.0 * (float(self.days.max(initial=0.0)) + 1.0)

    @cached_property
    def _key(self) -> FloatArray:
        """(B,) rising key of all blocks, leg by leg and then by falling days."""
        owner = np.repeat(np.arange(len(self.first_block) - 1), np.diff(self.first_block))
        return np.asarray(owner * self._span - self.days)

    @cached_property
    def _sums(self) -> FloatArray:
        """(N + 1,) prices summed up to each place."""
        return np.concatenate([[0.0], np.cumsum(self.price)])


def read_prices(folder: Path, network: Network) -> PriceTable:
    """Read ``bid_prices`` and, where it stands beside them, ``price_curves`` of a priced folder.

    Raises
    ------
    InputError
        If the tables are missing, at fault, or name legs that the network does not have.
    """
    faults = Faults()
    prices = read_table(folder, table_schema("legworth", "bid_prices"), faults)
    has_curves = any((folder / f"price_curves.{suffix}").exists() for suffix in ("csv", "parquet"))
    curves = read_table(folder, table_schema("legworth", "price_curves"), faults) if has_curves else None
    legs = [_legs(table, network, faults) for table in (prices, curves) if table is not None]
    if faults.errors or prices is None:
        raise InputError(faults.errors)
    bid_price = np.full(network.n_legs, np.nan)
    bid_price[legs[0]] = prices.frame["bid_price"].to_numpy()
    if curves is None or len(curves) == 0:
        nothing, none = np.zeros(0), np.zeros(network.n_legs + 1, dtype=np.int64)
        return PriceTable(bid_price, none, nothing, np.zeros(1, dtype=np.int64), nothing)
    return _with_curves(bid_price, curves, legs[1], network.n_legs, faults)


def prices_made_for(folder: Path, network: Network) -> str:
    """Say which prices these are, and whether they were made for the snapshot of this network.

    Raises
    ------
    SettingError
        If ``summary.json`` beside them names another network or currency.
    """
    kind = "price curves" if any(folder.glob("price_curves.*")) else "plain bid prices"
    try:
        summary = json.loads((folder / "summary.json").read_text(encoding="utf-8"))
        made = {name: str(summary[name]) for name in ("network", "currency", "as_of")}
    except (OSError, ValueError, KeyError, TypeError):
        return f"{kind} of {folder}, made for a snapshot unknown"
    for name, here in (("network", network.name), ("currency", network.currency)):
        if made[name] != here:
            raise SettingError(f"the prices in {folder} are for {name} {made[name]!r}, not {here!r}; price it again")
    here = network.as_of.isoformat()
    warning = "" if made["as_of"] == here else f"; CAUTION: this folder's snapshot is {here}, price it again"
    return f"{kind} of {folder}, made for the snapshot of {made['as_of']}{warning}"


def _legs(table: TableData, network: Network, faults: Faults) -> IntArray:
    leg, unknown = positions(table.frame["leg"], network.legs.name)
    names = table.frame["leg"]
    faults.add_rows(
        table.file,
        np.flatnonzero(unknown),
        table.line_of,
        "leg",
        lambda row: f"{names.iloc[row]!r} is not a leg of the network; price this network again",
    )
    return leg


def _with_curves(bid_price: FloatArray, curves: TableData, leg: IntArray, n_legs: int, faults: Faults) -> PriceTable:
    """Blocks of one leg and day each; notes those that do not hold a price for one seat, two seats, and so on."""
    frame = curves.frame
    days, remaining = frame["days_before"].to_numpy(), frame["remaining"].to_numpy()
    order = np.lexsort((remaining, -days, leg))
    leg, days, price = leg[order], days[order], frame["bid_price"].to_numpy()[order]
    begins = np.flatnonzero(np.concatenate([[True], (np.diff(leg) != 0) | (np.diff(days) != 0)]))
    first_seat = np.append(begins, len(price))
    place = np.arange(len(price)) - np.repeat(begins, np.diff(first_seat)) + 1
    faults.add_rows(
        curves.file,
        np.flatnonzero(remaining[order] != place),
        lambda row: curves.line_of(int(order[row])),
        "remaining",
        lambda row: (
            f"{remaining[order[row]]} stands where the price for {counted(place[row], 'seat')} left is missing; price "
            "again"
        ),
    )
    faults.raise_errors()
    first_block = np.searchsorted(leg[begins], np.arange(n_legs + 1))
    return PriceTable(bid_price, first_block, days[begins], first_seat, price)
