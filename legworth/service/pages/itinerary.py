"""An itinerary, or all of a pair of stations: what it is worth by class, and the least fare for a party."""

from __future__ import annotations

import asyncio
from dataclasses import dataclass
from datetime import UTC, datetime
from typing import Annotated, Any

import numpy as np
from fastapi import Query, Request
from starlette.responses import Response

from heuristics.arrivals import DAY
from legworth.connection import study_connection
from legworth.pricing import PricingOptions
from legworth.service.errors import UnknownError
from legworth.service.interface import state_of
from legworth.service.looking import itinerary_view
from legworth.service.pages.leg import settled
from legworth.service.pages.night_index import Row
from legworth.service.pages.route_map import first_date
from legworth.service.pages.routes import Planner, page_router, planner_of
from legworth.service.pages.solving import exact_program
from legworth.service.served_part import ServedPart
from network import SettingError

__all__ = ["PartyPrice", "pages", "party_price"]

SIZES = (1, 2, 4, 8, 12, 20)
MOST_OF_PAIR = 200

pages = page_router()
Name = Annotated[str, Query(min_length=1, max_length=200)]
Party = Annotated[int, Query(ge=1, le=10_000)]


@dataclass(frozen=True)
class PartyPrice:
    """What a party must pay at least, now.

    Attributes
    ----------
    seats
        Passengers.
    legs
        Price of the party's seats leg by leg, currency.
    obstacle
        Why there is no price; empty if there is one.
    """

    seats: int
    legs: tuple[float, ...]
    obstacle: str = ""

    @property
    def total(self) -> float:
        """Price of the party's seats on all legs, currency."""
        return sum(self.legs)

    @property
    def each(self) -> float:
        """The same for one passenger: the least fare."""
        return self.total / self.seats


def party_price(part: ServedPart, itinerary: int, seats: int, left: dict[str, int], now: float) -> PartyPrice:
    """Price a party by the price curve, one seat sold after the other."""
    legs, prices = part.network.legs, []
    for leg in part.path(itinerary):
        name = legs.name[leg]
        days = (float(legs.departs[leg].astype("datetime64[s]").astype(np.int64)) - now) / DAY
        remaining = left[name]
        if days <= 0:
            return PartyPrice(seats, (), f"{name} has departed")
        if remaining < seats:
            return PartyPrice(seats, (), f"{name} has {remaining} seat{'' if remaining == 1 else 's'} left")
        prices.append(part.prices.one_party_price(leg, days, remaining, seats))
    return PartyPrice(seats, tuple(prices))


async def _itinerary(planner: Planner, name: str) -> tuple[ServedPart, Row]:
    row = await asyncio.to_thread(planner.index.one, "SELECT * FROM itineraries WHERE itinerary = ?", name)
    if row is None:
        raise UnknownError(f"itinerary {name!r} is not on sale in this night; look for it by a part of its name")
    return await planner.part(row["part"]), row


@pages.get("/itinerary")
async def itinerary(request: Request, name: Name, n: Party = 1) -> Response:
    """Show an itinerary."""
    planner = await planner_of(request)
    part, row = await _itinerary(planner, name)
    view = itinerary_view(part, name, state_of(request), planner.now, planner.night.name)
    model = await asyncio.to_thread(_model, planner, part, row, n)
    return await planner.page("itinerary.html", view=view, row=row, n=n, **model)


def _model(planner: Planner, part: ServedPart, row: Row, n: int) -> dict[str, Any]:
    at = part.itinerary_position[row["itinerary"]]
    by_class = {
        found["fare_class"]: found
        for found in planner.index.part_rows(part.name, "connections", "itinerary", row["itinerary"], "fare_class")
    }
    legs = []
    for leg in part.path(at):
        name = str(part.network.legs.name[leg])
        found = planner.index.one("SELECT * FROM legs WHERE leg = ?", name)
        legs.append((found, planner.left[name]))
    sizes = sorted({*SIZES, n})
    parties = [party_price(part, at, size, planner.left, planner.now) for size in sizes]
    chosen = parties[sizes.index(n)]
    names = planner.index.stations
    return {
        "by_class": by_class,
        "legs": legs,
        "parties": parties,
        "party": chosen,
        "origin": names[row["origin"]]["name"],
        "destination": names[row["destination"]]["name"],
    }


@pages.get("/itinerary/exact")
async def exact(request: Request, name: Name, n: Party = 1) -> Response:
    """Solve without the party's seats: what it displaces exactly, and whom."""
    planner = await planner_of(request)
    part, row = await _itinerary(planner, name)
    network = part.network.with_remaining(part.remaining(planner.left))
    at = part.itinerary_position[name]
    if network.path_remaining[at] < n:
        raise SettingError(f"{name} has {network.path_remaining[at]} seats left on its path, fewer than {n}")
    lp, note = exact_program(planner.night.night.manifest)
    asked = datetime.fromtimestamp(planner.now, UTC)
    solver = request.app.state.planner.solver

    def work() -> tuple[Any, datetime]:
        return study_connection(network, [at], sorted({1, n}), PricingOptions(lp=lp))[0], asked

    job = solver.ask(("itinerary", planner.night.name, name, n), work)
    if not await settled(job):
        return await planner.page("waiting.html", status=202, what=f"a party of {n} on {name}")
    study, when = job.result()
    return await planner.page("exact.html", name=name, row=row, n=n, study=study, when=when, note=note)


@pages.get("/pair")
async def pair(
    request: Request,
    from_: Annotated[str, Query(alias="from", max_length=200)] = "",
    to: Annotated[str, Query(max_length=200)] = "",
    date: Annotated[str, Query(max_length=10)] = "",
    n: Party = 1,
) -> Response:
    """Show all itineraries between two stations on a date."""
    planner = await planner_of(request)
    index = planner.index
    for station in (from_, to):
        if station and station not in index.stations:
            raise UnknownError(f"there is no station {station!r}")
    rows: list[Row] = []
    dates = [
        found["date"]
        for found in await asyncio.to_thread(
            index.rows,
            "SELECT DISTINCT date FROM itineraries WHERE origin = ? AND destination = ? ORDER BY date",
            from_,
            to,
        )
    ]
    soon = first_date(index, planner.now)
    chosen = date if date in dates else next((each for each in dates if each >= soon), "")
    if chosen:
        rows = await asyncio.to_thread(
            index.rows,
            "SELECT * FROM itineraries WHERE origin = ? AND destination = ? AND date = ? "
            f"ORDER BY departs, itinerary LIMIT {MOST_OF_PAIR}",
            from_,
            to,
            chosen,
        )
    lines = []
    for row in rows:
        part = await planner.part(row["part"])
        at = part.itinerary_position[row["itinerary"]]
        network = part.network
        price = party_price(part, at, n, planner.left, planner.now)
        products = range(int(network.product_start[at]), int(network.product_start[at + 1]))
        sold = [
            network.fare_classes[network.product_class[product]]
            for product in products
            if not price.obstacle and float(network.fare[product]) >= price.each * (1 - 1e-9)
        ]
        left = min(planner.left[str(network.legs.name[leg])] for leg in part.path(at))
        lines.append((row, price, sold, left))
    return await planner.page(
        "pair.html",
        origin=from_,
        destination=to,
        dates=dates,
        date=chosen,
        asked=date,
        n=n,
        lines=lines,
        most=MOST_OF_PAIR,
    )
