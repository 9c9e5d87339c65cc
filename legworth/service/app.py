"""The application: state, limits, errors, and the routes of the interface and the pages."""

from __future__ import annotations

import contextlib
from collections.abc import AsyncIterator
from datetime import datetime

from fastapi import FastAPI

from legworth import __version__
from legworth.service.description import describe
from legworth.service.interface import interface
from legworth.service.limits import BodyLimit, RateLimit
from legworth.service.metrics import Metrics, metrics_router
from legworth.service.pages import install_pages
from legworth.service.problems import LastResort, install_problems
from legworth.service.settings import ServiceSettings
from legworth.service.state import ServiceState
from legworth.store import Store

__all__ = ["make_app"]

ABOUT = """Accept or refuse requests for itineraries by the bid prices of the night in force, sell and cancel seats,
and look legs, itineraries and nights up. The figures advise: passenger-rights law, contracts of carriage and licensed
practice govern whom a carrier carries, refuses or leaves behind, and come before any figure here."""


def make_app(
    store: Store, settings: ServiceSettings, at: datetime | None = None, state: ServiceState | None = None
) -> FastAPI:
    """Make the application.

    Parameters
    ----------
    store
        The store whose night in force judges.
    settings
        Ledger, limits and tokens.
    at
        Instant that the service's clock begins at, for drills; the present one if not given.
    state
        State that has been started already; else the application starts its own.
    """

    @contextlib.asynccontextmanager
    async def running(app: FastAPI) -> AsyncIterator[None]:
        app.state.service = state or ServiceState.start(store, settings, at)
        async with app.state.service.running():
            yield

    app = FastAPI(
        title="Legworth control",
        version=__version__,
        description=ABOUT,
        lifespan=running,
        openapi_url="/v1/openapi.json",
        docs_url=None,
        redoc_url=None,
        redirect_slashes=False,
    )
    install_problems(app)
    app.include_router(interface)
    app.include_router(metrics_router)
    install_pages(app)
    describe(app)
    # The last one added sees a request first.
    app.state.metrics = Metrics()
    app.add_middleware(RateLimit, rate=settings.rate_limit, burst=settings.burst)
    app.add_middleware(BodyLimit, limit=settings.body_limit)
    app.add_middleware(LastResort)
    app.add_middleware(app.state.metrics.middleware)
    return app
