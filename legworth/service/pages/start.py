"""Start page, and search: state of the night, what to look at first, and the way to a leg, itinerary or station."""

from __future__ import annotations

import asyncio
from typing import Annotated, Any

from fastapi import Query, Request
from starlette.responses import JSONResponse, RedirectResponse, Response

from legworth.service.interface import state_of
from legworth.service.pages.changes_file import read_changes
from legworth.service.pages.night_index import NightIndex, Row
from legworth.service.pages.rendering import address
from legworth.service.pages.routes import page_router, planner_of
from legworth.service.pages.standing import alerts_of
from legworth.store import Store

__all__ = ["pages"]

FIRST = 6
MOST_FOUND = 60
MOST_SUGGESTED = 12

pages = page_router()
Words = Annotated[str, Query(max_length=200)]


@pages.get("/")
async def start(request: Request) -> Response:
    """State of the night, and what to look at first."""
    planner = await planner_of(request)
    found = await asyncio.to_thread(_first, planner.index, state_of(request).store)
    return await planner.page("start.html", **found)


def _first(index: NightIndex, store: Store) -> dict[str, Any]:
    manifest = index.night.manifest
    changes = read_changes(index.night)
    total = index.one("SELECT count(*) AS products, coalesce(sum(at_stake), 0) AS money FROM disagreements")
    return {
        "manifest": manifest,
        "failed": sum(not check.passed for check in manifest.checks),
        "alerts": alerts_of(store, index.night),
        "moves": changes.prices.moves[:FIRST] if changes.prices is not None else [],
        "moves_unread": "prices" in changes.unread,
        "total": total,
        "disagreements": index.disagreements("true", (), "at_stake DESC, number, fare_class", FIRST),
        "dearest": index.rows(
            "SELECT leg, origin, destination, departs, bid_price, expected_sales FROM legs "
            f"ORDER BY bid_price DESC, leg LIMIT {FIRST}"
        ),
        "sizes": index.one(
            "SELECT count(*) AS legs, count(DISTINCT date) AS dates, min(date) AS first, max(date) AS last FROM legs"
        ),
    }


@pages.get("/search")
async def search(request: Request, q: Words = "") -> Response:
    """Go to the one thing that has this name, or list what has it in its name."""
    planner = await planner_of(request)
    words = q.strip()
    straight = await asyncio.to_thread(_straight, planner.index, words)
    if straight is not None:
        return RedirectResponse(straight, 303)
    found = await asyncio.to_thread(_found, planner.index, words, MOST_FOUND)
    return await planner.page("search.html", q=words, most=MOST_FOUND, **found)


@pages.get("/suggest.json")
async def suggest(request: Request, q: Words = "") -> Response:
    """Names that begin or go on so, for the search box."""
    planner = await planner_of(request)
    if not q.strip():
        return JSONResponse([])
    found = await asyncio.to_thread(_found, planner.index, q.strip(), MOST_SUGGESTED)
    names = [(row["leg"], f"leg, {row['origin']} to {row['destination']}") for row in found["legs"]]
    names += [(row["itinerary"], f"itinerary, {row['origin']} to {row['destination']}") for row in found["itineraries"]]
    names = [(row["station"], f"station, {row['name']}") for row in found["stations"]] + names
    return JSONResponse([{"name": name, "about": about} for name, about in names[:MOST_SUGGESTED]])


def _straight(index: NightIndex, words: str) -> str | None:
    """Address of the one leg, itinerary or pair of stations of this name."""
    if index.one("SELECT leg FROM legs WHERE leg = ?", words):
        return address("/leg", name=words)
    if index.one("SELECT itinerary FROM itineraries WHERE itinerary = ?", words):
        return address("/itinerary", name=words)
    for mark in (None, "-"):
        ends = words.split(mark)
        if len(ends) == 2 and all(end in index.stations for end in ends):
            return address("/pair", from_=ends[0], to=ends[1])
    return None


def _found(index: NightIndex, words: str, most: int) -> dict[str, list[Row]]:
    if not words:
        return {"legs": [], "itineraries": [], "stations": []}
    legs = (
        "SELECT leg, origin, destination, departs FROM legs WHERE contains(lower(leg), lower(?)) "
        f"ORDER BY NOT starts_with(lower(leg), lower(?)), date, leg LIMIT {most}"
    )
    itineraries = (
        "SELECT itinerary, origin, destination, departs, legs FROM itineraries "
        "WHERE contains(lower(itinerary), lower(?)) "
        f"ORDER BY NOT starts_with(lower(itinerary), lower(?)), date, itinerary LIMIT {most}"
    )
    stations = (
        "SELECT station, name FROM stations WHERE contains(lower(station), lower(?)) "
        f"OR contains(lower(name), lower(?)) ORDER BY station LIMIT {most}"
    )
    return {
        "legs": index.rows(legs, words, words),
        "itineraries": index.rows(itineraries, words, words),
        "stations": index.rows(stations, words, words),
    }
