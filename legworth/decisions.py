"""Accept or refuse: requests against the prices in force and the seats left, in bulk."""

from __future__ import annotations

from dataclasses import dataclass
from enum import IntEnum
from string import Formatter

import numpy as np
import numpy.typing as npt
import pandas as pd
import pyarrow as pa
import pyarrow.compute as pc

from heuristics.arrivals import DAY
from legworth.control import EQUAL
from legworth.price_table import PriceTable
from network import Network
from network.arrays import BoolArray, FloatArray, IntArray

__all__ = ["SENTENCES", "Decisions", "Reason", "Requests", "decide", "decisions_table", "sentences"]

UNPRICED, SHORT, EMPTY, DEPARTED = 1e15, 2e15, 3e15, 4e15
"""Weights of a leg without price, with too few seats, with none, or departed: far above any price."""


class Reason(IntEnum):
    """Why a request is accepted or refused; the first that holds, from the top, counts."""

    UNKNOWN_ITINERARY = 0
    UNKNOWN_PRODUCT = 1
    NO_FARE = 2
    NO_PASSENGERS = 3
    DEPARTED = 4
    NO_SEATS = 5
    TOO_FEW_SEATS = 6
    NO_PRICE = 7
    FARE_BELOW_PRICE = 8
    FARE_REACHES_PRICE = 9


SENTENCES = {
    Reason.UNKNOWN_ITINERARY: "Refused: the itinerary is not known.",
    Reason.UNKNOWN_PRODUCT: "Refused: the itinerary is not sold in this fare class.",
    Reason.NO_FARE: "Refused: neither a fare nor a fare class is given.",
    Reason.NO_PASSENGERS: "Refused: nobody is to travel; ask for at least one seat.",
    Reason.DEPARTED: "Refused: {binding} has departed.",
    Reason.NO_SEATS: "Refused: {binding} has no seats left.",
    Reason.TOO_FEW_SEATS: "Refused: {binding} has fewer than {party} seats left.",
    Reason.NO_PRICE: "Refused: {binding} has no price; price the network again.",
    Reason.FARE_BELOW_PRICE: "Refused: {asked} asked is below the price of the seats, {price} ({prices}); "
    "{binding} costs most.",
    Reason.FARE_REACHES_PRICE: "Accepted: {asked} asked reaches the price of the seats, {price} ({prices}); "
    "{binding} costs most.",
}
"""The answer in words; money of the whole party, and the price of the party on each leg in brackets."""


@dataclass(frozen=True, eq=False)
class Requests:
    """Requests by position.

    Attributes
    ----------
    itinerary
        (m,) position of the itinerary, -1 where it is unknown.
    product
        (m,) position of the product, -1 where no fare class is asked for, -2 where the itinerary has none of it.
    fare
        (m,) currency for one passenger, NaN to take that of the product.
    seats
        (m,) passengers.
    moment
        (m,) seconds since 1970-01-01 UTC.
    """

    itinerary: IntArray
    product: IntArray
    fare: FloatArray
    seats: IntArray
    moment: FloatArray


@dataclass(frozen=True, eq=False)
class Decisions:
    """Answers by position.

    Attributes
    ----------
    reason
        (m,) `Reason`; accepted where it is ``FARE_REACHES_PRICE``.
    fare
        (m,) fare for one passenger, NaN if unknown.
    displacement
        (m,) currency for the whole party, NaN where there is no price.
    binding_leg
        (m,) leg that costs most, or that has too few seats or has departed; -1 where there is none.
    leg_start, leg, leg_price
        Legs of every request's path, and the price of the party on each, NaN where there is none.
    """

    reason: npt.NDArray[np.int8]
    fare: FloatArray
    displacement: FloatArray
    binding_leg: IntArray
    leg_start: IntArray
    leg: IntArray
    leg_price: FloatArray

    @property
    def accepted(self) -> BoolArray:
        """(m,) whether the request is accepted."""
        return np.equal(self.reason, Reason.FARE_REACHES_PRICE)


def decide(network: Network, prices: PriceTable, requests: Requests, remaining: IntArray | None = None) -> Decisions:
    """Judge every request by itself against the seats left now.

    A request is accepted when its itinerary is known and still to depart, the party fits into every leg, and
    the fares of the party reach the price of its seats on all legs together.

    Parameters
    ----------
    network, prices
        What is sold, and at which prices.
    requests
        What is asked.
    remaining
        (L,) seats left now, if they are not those of the network's snapshot.
    """
    remaining = network.remaining if remaining is None else remaining
    known = requests.itinerary >= 0
    itinerary = np.where(known, requests.itinerary, 0)
    fare = np.where(
        np.isnan(requests.fare) & (requests.product >= 0),
        network.fare[np.maximum(requests.product, 0)] if network.n_products else np.nan,
        requests.fare,
    )
    length = np.where(known, np.diff(network.path_start)[itinerary], 0)
    leg_start = np.concatenate([[0], np.cumsum(length)])
    owner = np.repeat(np.arange(len(known)), length)
    offset = np.arange(leg_start[-1]) - leg_start[owner]
    leg = network.path_leg[network.path_start[itinerary][owner] + offset].astype(np.int64)

    departs = network.legs.departs.astype("datetime64[s]").astype(np.int64)
    days = (departs[leg] - requests.moment[owner]) / DAY
    seats = requests.seats[owner]
    left = remaining[leg]
    fits = (left >= seats) & (left > 0) & (days > 0) & (seats > 0)
    leg_price = np.full(len(leg), np.nan)
    leg_price[fits] = prices.party_price(leg[fits], days[fits], left[fits], seats[fits])

    weight = np.where(np.isnan(leg_price), UNPRICED, leg_price)
    obstacle = np.flatnonzero(~fits & (seats > 0))
    weight[obstacle] = _obstacles(left[obstacle], days[obstacle])
    displacement = _by_request(np.add, leg_price, leg_start)
    greatest = _by_request(np.maximum, weight, leg_start)
    binding = _first_equal(weight, greatest, leg_start, leg)
    asked = fare * requests.seats
    reason = np.full(len(known), Reason.FARE_REACHES_PRICE, dtype=np.int8)
    for why, holds in (
        (Reason.FARE_BELOW_PRICE, asked < displacement - EQUAL * np.abs(asked)),
        (Reason.NO_PRICE, greatest >= UNPRICED),
        (Reason.TOO_FEW_SEATS, greatest > UNPRICED),
        (Reason.NO_SEATS, greatest >= EMPTY),
        (Reason.DEPARTED, greatest >= DEPARTED),
        (Reason.NO_PASSENGERS, requests.seats < 1),
        (Reason.NO_FARE, np.isnan(fare)),
        (Reason.UNKNOWN_PRODUCT, requests.product == -2),
        (Reason.UNKNOWN_ITINERARY, ~known),
    ):
        reason[holds] = why
    priced = reason >= Reason.FARE_BELOW_PRICE
    return Decisions(
        reason=reason,
        fare=fare,
        displacement=np.where(priced, displacement, np.nan),
        binding_leg=np.where(reason >= Reason.DEPARTED, binding, -1),
        leg_start=leg_start,
        leg=leg,
        leg_price=leg_price,
    )


def _obstacles(left: IntArray, days: FloatArray) -> FloatArray:
    """Weights of legs that cannot carry the party, above every price; the fuller of two short legs weighs more."""
    return np.where(days <= 0, DEPARTED, np.where(left <= 0, EMPTY, SHORT - left))


def _by_request(fold: np.ufunc, figure: FloatArray, leg_start: IntArray) -> FloatArray:
    """Fold a figure per leg over the legs of every request; NaN where there are none."""
    folded = np.full(len(leg_start) - 1, np.nan)
    some = np.diff(leg_start) > 0
    if len(figure):
        folded[some] = fold.reduceat(figure, leg_start[:-1][some])
    return folded


def _first_equal(figure: FloatArray, wanted: FloatArray, leg_start: IntArray, leg: IntArray) -> IntArray:
    """First leg of every request whose figure is the wanted one; -1 where there is none."""
    owner = np.repeat(np.arange(len(wanted)), np.diff(leg_start))
    at = np.flatnonzero(figure == wanted[owner])[::-1]
    found = np.full(len(wanted), -1, dtype=np.int64)
    found[owner[at]] = leg[at]
    return found


def decisions_table(network: Network, asked: pd.DataFrame, requests: Requests, found: Decisions) -> pd.DataFrame:
    """Label the answers as the schema ``decisions`` declares, with a sentence each."""
    binding, prices = _binding_names(network, found), _joined_prices(found)
    words = [reason.name.lower() for reason in Reason]
    sentence = _sentences(found, requests, binding, prices)
    return pd.DataFrame(
        {
            "request": asked["request"],
            "itinerary": asked["itinerary"],
            "fare_class": asked["fare_class"],
            "fare": found.fare,
            "seats": requests.seats,
            "answer": pd.Categorical.from_codes(found.accepted.astype(np.int64), pd.Index(["refuse", "accept"])),
            "reason": pd.Categorical.from_codes(found.reason.astype(np.int64), pd.Index(words)),
            "displacement": found.displacement,
            "binding_leg": binding.to_pandas(),
            "leg_prices": prices.to_pandas(),
            "sentence": sentence.to_pandas(),
        }
    )


def sentences(network: Network, requests: Requests, found: Decisions) -> pa.Array:
    """Say every answer in a sentence, as `decisions_table` does."""
    return _sentences(found, requests, _binding_names(network, found), _joined_prices(found))


def _binding_names(network: Network, found: Decisions) -> pa.Array:
    """Name of the binding leg of every answer; missing where there is none."""
    names = pa.array(network.legs.name, pa.string())
    return names.take(pa.array(found.binding_leg, mask=found.binding_leg < 0))


def _money(values: FloatArray) -> pa.Array:
    """Money with two decimals, as text; missing where it is NaN."""
    return pc.cast(pc.cast(pa.array(np.round(values, 2), mask=np.isnan(values)), pa.decimal128(18, 2)), pa.string())


def _joined_prices(found: Decisions) -> pa.Array:
    """Prices of the path, joined by +; missing where the request has no price."""
    text = _money(found.leg_price)
    lists = pa.ListArray.from_arrays(pa.array(found.leg_start, pa.int32()), text)
    joined = pc.binary_join(lists, "+")
    return pc.if_else(pa.array(np.isnan(found.displacement)), pa.scalar(None, pa.string()), joined)


def _sentences(found: Decisions, requests: Requests, binding: pa.Array, prices: pa.Array) -> pa.Array:
    """One sentence a request, by reason."""
    words = {
        "party": pc.cast(pa.array(requests.seats), pa.string()),
        "asked": _money(found.fare * requests.seats),
        "price": _money(found.displacement),
        "prices": prices,
        "binding": binding,
    }
    filled = {name: pc.fill_null(column, "") for name, column in words.items()}
    chosen = pa.array([""] * len(found.reason))
    met = set(np.unique(found.reason).tolist())
    for reason, sentence in SENTENCES.items():
        if reason not in met:
            continue
        parts: list[pa.Array | pa.Scalar] = []
        for plain, name, _, _ in Formatter().parse(sentence):
            parts += [pa.scalar(plain)] + ([filled[name]] if name else [])
        text = pc.binary_join_element_wise(*parts, "")
        chosen = pc.if_else(pa.array(found.reason == reason), text, chosen)
    return chosen
