"""A leg: seats and price now, price curves, worth of further seats, protection levels, and whom a sale displaces."""

from __future__ import annotations

import asyncio
import contextlib
from concurrent.futures import Future
from datetime import UTC, datetime
from typing import Annotated, Any

import numpy as np
from fastapi import Query, Request
from starlette.responses import JSONResponse, Response

from heuristics.arrivals import DAY
from legworth.service.errors import UnknownError
from legworth.service.interface import state_of
from legworth.service.looking import leg_view
from legworth.service.pages.leg_figures import curve_charts, one_more_sale, seat_value_chart
from legworth.service.pages.night_index import Row
from legworth.service.pages.routes import Planner, page_router, planner_of
from legworth.service.pages.solving import PATIENCE, exact_program
from legworth.service.served_part import ServedPart
from network import SettingError

__all__ = ["pages", "settled"]

FEW = 20

pages = page_router()
Name = Annotated[str, Query(min_length=1, max_length=200)]


async def _leg(planner: Planner, name: str) -> tuple[ServedPart, Row]:
    row = await asyncio.to_thread(planner.index.one, "SELECT * FROM legs WHERE leg = ?", name)
    if row is None:
        raise UnknownError(f"leg {name!r} is not on sale in this night; look for it by a part of its name")
    return await planner.part(row["part"]), row


@pages.get("/leg")
async def leg(request: Request, name: Name, all_: Annotated[bool, Query(alias="all")] = False) -> Response:
    """Show a leg."""
    planner = await planner_of(request)
    part, row = await _leg(planner, name)
    view = leg_view(part, name, state_of(request), planner.now, planner.night.name)
    model = await asyncio.to_thread(_model, planner, part, row, view.remaining, all_)
    return await planner.page("leg.html", view=view, row=row, all=all_, few=FEW, **model)


@pages.get("/leg/now.json")
async def now(request: Request, name: Name) -> Response:
    """Seats and price now, for the page to show again and again."""
    planner = await planner_of(request)
    part, _ = await _leg(planner, name)
    view = leg_view(part, name, state_of(request), planner.now, planner.night.name)
    price = "" if view.price_now is None else f"{view.price_now:,.2f}"
    return JSONResponse({"sold": f"{view.sold:,}", "remaining": f"{view.remaining:,}", "price": price})


def _model(planner: Planner, part: ServedPart, row: Row, left: int, everything: bool) -> dict[str, Any]:
    at = part.leg_position[row["leg"]]
    days = (float(part.network.legs.departs[at].astype("datetime64[s]").astype(np.int64)) - planner.now) / DAY
    charts, curves = curve_charts(part, at, days, left)
    worth, worth_rows = seat_value_chart(part, at)
    protection = planner.index.part_rows(part.name, "protection", "leg", row["leg"], "rank")
    names = planner.index.stations
    return {
        "days": days,
        "charts": charts,
        "curves": curves,
        "worth": worth,
        "worth_rows": worth_rows,
        "protection": protection if everything else protection[:FEW],
        "ranked": len(protection),
        "origin": names[row["origin"]]["name"],
        "destination": names[row["destination"]]["name"],
    }


@pages.get("/leg/displaced")
async def displaced(request: Request, name: Name) -> Response:
    """Solve without one seat of the leg, and show whom that displaces."""
    planner = await planner_of(request)
    part, row = await _leg(planner, name)
    network = part.network.with_remaining(part.remaining(planner.left))
    at = part.leg_position[name]
    if network.remaining[at] < 1:
        raise SettingError(f"leg {name} has no seat left, so that there is no further sale to look into")
    options, note = exact_program(planner.night.night.manifest)
    asked = datetime.fromtimestamp(planner.now, UTC)
    solver = request.app.state.planner.solver

    def work() -> tuple[Any, datetime]:
        return one_more_sale(network, at, options), asked

    job = solver.ask(("leg", planner.night.name, name), work)
    if not await settled(job):
        return await planner.page("waiting.html", status=202, what=f"one more sale on leg {name}")
    found, when = job.result()
    return await planner.page("displaced.html", name=name, row=row, found=found, when=when, note=note)


async def settled(job: Future[Any]) -> bool:
    """Wait a moment for a solve; whether it has ended, well or not."""
    with contextlib.suppress(Exception):
        await asyncio.wait_for(asyncio.shield(asyncio.wrap_future(job)), PATIENCE)
    return job.done()
