"""Pages for planners: map, legs, itineraries, disagreements by money, and tonight against last night.

Every page is made on the server and works without a script; scripts add live figures and shortcuts. A page asks no
other host for anything, and a strict Content-Security-Policy says so to the browser.
"""

from __future__ import annotations

import asyncio
from collections.abc import AsyncIterator
from contextlib import asynccontextmanager
from typing import TYPE_CHECKING

from legworth.service.pages import changes, disagreements, itinerary, leg, route_map, sign_in, start
from legworth.service.pages.files import PageFiles
from legworth.service.pages.routes import NoSuchPage, PlannerState

if TYPE_CHECKING:
    from fastapi import FastAPI

__all__ = ["install_pages"]


def install_pages(app: FastAPI) -> None:
    """Add the pages, and the files that they use, to an application; after every other route of it."""
    planner, service_runs = PlannerState(), app.router.lifespan_context

    @asynccontextmanager
    async def running(app: FastAPI) -> AsyncIterator[None]:
        async with service_runs(app):
            state = app.state.service
            state.when_taken_over.append(planner.preparation.prepare)
            if state.served is not None:
                planner.preparation.prepare(state.served)
            try:
                yield
            finally:
                planner.solver.close()
                await asyncio.to_thread(planner.preparation.close)

    app.state.planner, app.router.lifespan_context = planner, running
    for module in (start, route_map, leg, itinerary, disagreements, changes, sign_in):
        app.include_router(module.pages)
    app.mount("/static", PageFiles(), name="static")
    app.router.routes.append(NoSuchPage())
