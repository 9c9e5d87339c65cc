"""Legs, itineraries, nights and health as the interface shows them."""

from __future__ import annotations

from datetime import datetime, timedelta, timezone
from typing import Any

import numpy as np

from heuristics.arrivals import DAY
from legworth.service.messages import Health, ItineraryView, LegView, NightView, ProductView
from legworth.service.served_part import Question, ServedPart
from legworth.service.state import STORE, TROUBLES, ServiceState
from legworth.store import Night

__all__ = ["health_of", "itinerary_view", "leg_view", "local_instant", "night_view"]

OLD = timedelta(hours=36).total_seconds()
"""A night whose snapshot is older than this is called old: a refresh was missed."""


def local_instant(instant: np.datetime64, offset: Any) -> datetime:
    """An instant with the local offset (minutes) that its table gave."""
    seconds = int(instant.astype("datetime64[s]").astype(np.int64))
    return datetime.fromtimestamp(seconds, timezone(timedelta(minutes=int(offset))))


def leg_view(part: ServedPart, leg: str, state: ServiceState, now: float, night: str | None = None) -> LegView:
    """One leg of a night, that in force unless another one is named."""
    network, at = part.network, part.leg_position[leg]
    legs, count = network.legs, state.seats.counts[leg]
    days = (float(legs.departs[at].astype("datetime64[s]").astype(np.int64)) - now) / DAY
    sellable = days > 0 and count.remaining > 0
    price = part.prices.one_party_price(at, days, count.remaining, 1) if sellable else None
    return LegView(
        leg=leg,
        origin=network.stations.name[legs.origin[at]],
        destination=network.stations.name[legs.destination[at]],
        departs=local_instant(legs.departs[at], legs.departs_offset[at]),
        arrives=local_instant(legs.arrives[at], legs.arrives_offset[at]),
        capacity=count.capacity,
        sold=count.sold,
        remaining=count.remaining,
        bid_price=_figure(part.prices.bid_price[at]),
        price_now=_figure(price),
        night=night or state.night().name,
    )


def itinerary_view(
    part: ServedPart, itinerary: str, state: ServiceState, now: float, night: str | None = None
) -> ItineraryView:
    """One itinerary, and each of its products for one passenger now."""
    network, at = part.network, part.itinerary_position[itinerary]
    path = part.path(at)
    names = tuple(network.legs.name[leg] for leg in path)
    products, displacement = [], None
    for product in range(network.product_start[at], network.product_start[at + 1]):
        name = network.fare_classes[network.product_class[product]]
        question = Question(path, names, itinerary, name, float(network.fare[product]), 1, now)
        answer = part.answer(question, state.seats.left)
        displacement = answer["displacement"]
        verdict = "accept" if answer["accepted"] else "refuse"
        products.append(ProductView(fare_class=name, fare=answer["fare"], answer=verdict, reason=answer["reason"]))
    return ItineraryView(
        itinerary=itinerary,
        legs=list(names),
        remaining=min(state.seats.left[name] for name in names),
        displacement=displacement,
        products=products,
        night=night or state.night().name,
    )


def _figure(value: float | None) -> float | None:
    return None if value is None or np.isnan(value) else float(value)


def night_view(night: Night, state: ServiceState) -> NightView:
    """One night."""
    manifest = night.manifest
    return NightView(
        night=night.name,
        as_of=manifest.as_of,
        published=manifest.published or manifest.as_of,
        in_force=state.served is not None and state.served.name == night.name,
        legs=sum(part.legs for part in manifest.parts),
        products=sum(part.products for part in manifest.parts),
    )


def health_of(state: ServiceState) -> Health:
    """Whether the service can answer, and what is wrong."""
    served = state.served
    as_of = None if served is None else served.night.manifest.as_of
    status: Any = "ok"
    if as_of is None:
        status = "no sound night" if STORE in state.troubles else "no night"
    elif state.troubles:
        status = "in trouble"
    elif state.now() - as_of.timestamp() > OLD:
        status = "old night"
    return Health(
        status=status,
        night=None if served is None else served.name,
        as_of=as_of,
        legs=0 if served is None else len(served.legs),
        ledger_legs=len(state.seats.counts),
        latest_counts=None if state.latest_counts is None else state.latest_counts.summary(),
        waiting=state.writer.waiting,
        troubles=[state.trouble(what) for what in TROUBLES if what in state.troubles],
    )
