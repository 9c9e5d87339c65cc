"""Map: the legs of a date on the plane and in a table, by price, load or seats left."""

from __future__ import annotations

import asyncio
from collections.abc import Mapping
from dataclasses import dataclass
from datetime import datetime
from enum import StrEnum
from itertools import pairwise
from operator import attrgetter
from typing import Annotated, Any

import numpy as np
from fastapi import Query, Request
from starlette.responses import Response

from heuristics.arrivals import DAY
from legworth.service.interface import state_of
from legworth.service.orders import SeatCount
from legworth.service.pages.chart import round_step
from legworth.service.pages.map_drawing import draw_routes
from legworth.service.pages.night_index import NightIndex, Row
from legworth.service.pages.routes import page_router, planner_of
from legworth.service.served_part import ServedPart

__all__ = ["Figure", "pages"]

CLASSES = 7

pages = page_router()


class Figure(StrEnum):
    """What the colours of the map say."""

    PRICE = "price"
    BID = "bid"
    LOAD = "load"
    LEFT = "left"


FIGURES = {
    Figure.PRICE: "price of the next sale now",
    Figure.BID: "bid price at the snapshot",
    Figure.LOAD: "load: seats sold of those authorised",
    Figure.LEFT: "seats left",
}
SORTS = ("departs", "leg", "origin", "destination", "price", "bid", "load", "left", "expected")


@dataclass(frozen=True)
class MapLeg:
    """A leg on the map: as on sale now.

    Attributes
    ----------
    leg, origin, destination, departs
        Name, stations, and local departure.
    price, bid
        Price of the next sale now, None if departed or sold out; bid price at the snapshot.
    load, left, expected
        Share of the seats sold, seats left, and passengers expected at the snapshot.
    """

    leg: str
    origin: str
    destination: str
    departs: str
    price: float | None
    bid: float
    load: float
    left: int
    expected: float


@dataclass(frozen=True)
class Class:
    """A class of the colour scale: its number and its bounds as text."""

    number: int
    label: str


@pages.get("/map")
async def route_map(
    request: Request,
    date: Annotated[str, Query(max_length=10)] = "",
    figure: Figure = Figure.PRICE,
    sort: Annotated[str, Query(max_length=20)] = "departs",
    down: bool = False,
    q: Annotated[str, Query(max_length=200)] = "",
) -> Response:
    """Show the legs of a date."""
    planner = await planner_of(request)
    index = planner.index
    chosen = date if date in index.dates else first_date(index, planner.now)
    rows = await asyncio.to_thread(index.rows, "SELECT * FROM legs WHERE date = ? ORDER BY departs, leg", chosen)
    parts = {name: await planner.part(name) for name in sorted({row["part"] for row in rows})}
    counts = state_of(request).seats.counts
    sort = sort if sort in SORTS else "departs"
    model = await asyncio.to_thread(_model, index, rows, parts, counts, planner.now, figure, sort, down, q.strip())
    place = index.dates.index(chosen) if chosen in index.dates else 0
    return await planner.page(
        "map.html",
        date=chosen,
        asked=date,
        before=index.dates[place - 1] if place > 0 else None,
        after=index.dates[place + 1] if place + 1 < len(index.dates) else None,
        figure=figure,
        figures=FIGURES,
        sort=sort,
        down=down,
        q=q.strip(),
        **model,
    )


def first_date(index: NightIndex, now: float) -> str:
    """First date on which something still departs; the last one if nothing does."""
    moment = datetime.fromtimestamp(now).astimezone()
    for row in index.rows("SELECT date, max(departs) AS latest FROM legs GROUP BY date ORDER BY date"):
        if datetime.fromisoformat(row["latest"]) > moment:
            return str(row["date"])
    return index.dates[-1] if index.dates else ""


def map_legs(
    rows: list[Row], parts: Mapping[str, ServedPart], counts: Mapping[str, SeatCount], now: float
) -> list[MapLeg]:
    """Legs as on sale now, in the order of the rows."""
    found = []
    for row in rows:
        part = parts[row["part"]]
        at = part.leg_position[row["leg"]]
        count = counts[row["leg"]]
        days = (float(part.network.legs.departs[at].astype("datetime64[s]").astype(np.int64)) - now) / DAY
        on_sale = days > 0 and count.remaining > 0
        price = part.prices.one_party_price(at, days, count.remaining, 1) if on_sale else None
        found.append(
            MapLeg(
                leg=row["leg"],
                origin=row["origin"],
                destination=row["destination"],
                departs=row["departs"],
                price=price,
                bid=row["bid_price"],
                load=count.sold / count.capacity if count.capacity else 1.0,
                left=count.remaining,
                expected=row["expected_sales"],
            )
        )
    return found


def _model(
    index: NightIndex,
    rows: list[Row],
    parts: Mapping[str, ServedPart],
    counts: Mapping[str, SeatCount],
    now: float,
    figure: Figure,
    sort: str,
    down: bool,
    q: str,
) -> dict[str, Any]:
    legs = map_legs(rows, parts, counts, now)
    stations = {name: (row["name"], row["latitude"], row["longitude"]) for name, row in index.stations.items()}
    drawing = draw_routes(stations, [(leg.origin, leg.destination) for leg in legs])
    bounds, classes = scale_classes([getattr(leg, figure) for leg in legs], figure)
    colour = [_class_of(getattr(leg, figure), bounds) for leg in legs]
    width = [1 + min(4, int(5 * min(leg.load, 0.999))) for leg in legs]
    names = {name: row["name"] for name, row in index.stations.items()}
    found = [_named_so(leg, names, q.lower()) for leg in legs]
    table = [leg for leg, fits in zip(legs, found, strict=True) if fits]
    known = sorted((leg for leg in table if getattr(leg, sort) is not None), key=attrgetter(sort), reverse=down)
    return {
        "drawing": drawing,
        "drawn": list(zip(legs, drawing.ribbons, colour, width, found, strict=True)),
        "classes": classes,
        "names": names,
        "table": known + [leg for leg in table if getattr(leg, sort) is None],
        "total": len(legs),
    }


def _named_so(leg: MapLeg, names: Mapping[str, str], words: str) -> bool:
    """Whether a leg or a station of it has some words in its name."""
    ends = (leg.origin, leg.destination)
    return any(words in name.lower() for name in (leg.leg, *ends, *(names.get(end, end) for end in ends)))


def scale_classes(values: list[float | None], figure: Figure) -> tuple[list[float], list[Class]]:
    """Lower bounds of all classes but the first, and the classes, of equal width in round figures."""
    high = max((value for value in values if value is not None), default=0.0)
    if figure is Figure.LOAD:
        bounds = [0.4, 0.5, 0.6, 0.7, 0.8, 0.9]
        shown = [f"{100 * bound:.0f} %" for bound in bounds]
    else:
        step = round_step(max(high, 1.0), CLASSES)
        step = max(step, 1.0) if figure is Figure.LEFT else step
        bounds = [step * number for number in range(1, max(1, int(np.ceil(high / step - 1e-9))))]
        shown = [f"{bound:,.0f}" if step >= 1 else f"{bound:,.2f}" for bound in bounds]
    if not bounds:
        return [], [Class(CLASSES - 1, "all")]
    labels = [f"below {shown[0]}"]
    labels += [f"{low} to {up}" for low, up in pairwise(shown)]
    labels += [f"{shown[-1]} or more"]
    numbers = np.linspace(0, CLASSES - 1, len(labels)).round().astype(int).tolist()
    return bounds, [Class(number, label) for number, label in zip(numbers, labels, strict=True)]


def _class_of(value: float | None, bounds: list[float]) -> int | None:
    """Number of the colour of a figure, None where there is none."""
    if value is None:
        return None
    numbers = np.linspace(0, CLASSES - 1, len(bounds) + 1).round().astype(int) if bounds else [CLASSES - 1]
    return int(numbers[int(np.searchsorted(bounds, value, side="right"))])
