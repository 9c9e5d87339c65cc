"""Metrics in the Prometheus text format."""

from __future__ import annotations

from collections.abc import Callable
from time import perf_counter

from fastapi import APIRouter, Depends, Request
from prometheus_client import CollectorRegistry, Counter, Gauge, Histogram
from prometheus_client.exposition import CONTENT_TYPE_LATEST, generate_latest
from starlette.responses import Response
from starlette.types import ASGIApp, Message, Receive, Scope, Send

from legworth.service.counted_legs import CountedLegs
from legworth.service.interface import OPEN, Permit, state_of
from legworth.service.problems import described_problems
from legworth.service.state import TROUBLES

__all__ = ["Metrics", "metrics_router"]

COUNTED = ("all", "unknown", "oversold")
BUCKETS = (0.0005, 0.001, 0.002, 0.005, 0.01, 0.02, 0.05, 0.1, 0.25, 1.0, 5.0)


class Metrics:
    """What is counted: requests by route and status, and how long they took."""

    def __init__(self) -> None:
        self.registry = CollectorRegistry()
        labels = ("route", "status")
        self.requests = Counter("legworth_requests", "Requests answered.", labels, registry=self.registry)
        self.seconds = Histogram(
            "legworth_request_seconds", "Time to answer.", ("route",), registry=self.registry, buckets=BUCKETS
        )
        self.night = Gauge("legworth_night_number", "Number of the night in force.", registry=self.registry)
        self.age = Gauge("legworth_snapshot_age_seconds", "Age of its snapshot.", registry=self.registry)
        self.waiting = Gauge("legworth_orders_waiting", "Orders that wait for the ledger.", registry=self.registry)
        self.sold = Gauge("legworth_seats_sold", "Seats sold on all legs.", registry=self.registry)
        self.legs = Gauge("legworth_night_legs", "Legs that the night sells.", registry=self.registry)
        self.ledger_legs = Gauge("legworth_ledger_legs", "Legs in the ledger.", registry=self.registry)
        self.counted = Counter(
            "legworth_counted_legs",
            "Legs in snapshots of counts: all, those that the night did not sell, and those oversold.",
            ("which",),
            registry=self.registry,
        )
        for which in COUNTED:
            self.counted.labels(which)
        self.trouble = Gauge(
            "legworth_trouble",
            "1 if the night in force cannot be taken over, or the ledger cannot be read.",
            ("what",),
            registry=self.registry,
        )

    def note_counts(self, found: CountedLegs) -> None:
        """Count the legs of a snapshot that was taken."""
        for which, names in zip(COUNTED, (found.names, found.unknown, found.oversold), strict=True):
            self.counted.labels(which).inc(len(names))

    @property
    def middleware(self) -> Callable[[ASGIApp], ASGIApp]:
        """Middleware that counts."""
        return lambda app: _Counting(app, self)


class _Counting:
    def __init__(self, app: ASGIApp, metrics: Metrics) -> None:
        self.app = app
        self.metrics = metrics

    async def __call__(self, scope: Scope, receive: Receive, send: Send) -> None:
        if scope["type"] != "http":
            await self.app(scope, receive, send)
            return
        begun = perf_counter()
        status = 500

        async def noted(message: Message) -> None:
            nonlocal status
            if message["type"] == "http.response.start":
                status = message["status"]
            await send(message)

        try:
            await self.app(scope, receive, noted)
        finally:
            route = getattr(scope.get("route"), "path", "other")
            self.metrics.requests.labels(route, status).inc()
            self.metrics.seconds.labels(route).observe(perf_counter() - begun)


metrics_router = APIRouter(responses=described_problems(401, 403, 429, 503))


@metrics_router.get(
    "/metrics",
    tags=["look"],
    response_class=Response,
    responses={200: {"description": "Metrics.", "content": {"text/plain": {"schema": {"type": "string"}}}}},
    dependencies=[Depends(Permit("ask"))],
    openapi_extra=OPEN,
)
async def metrics(request: Request) -> Response:
    """Metrics in the Prometheus text format."""
    state, found = state_of(request), request.app.state.metrics
    if state.served is not None:
        manifest = state.served.night.manifest
        found.night.set(manifest.number)
        found.age.set(max(0.0, state.now() - manifest.as_of.timestamp()))
        found.legs.set(len(state.served.legs))
    found.ledger_legs.set(len(state.seats.counts))
    found.waiting.set(state.writer.waiting)
    found.sold.set(sum(count.sold for count in list(state.seats.counts.values())))
    for what in TROUBLES:
        found.trouble.labels(what).set(what in state.troubles)
    return Response(generate_latest(found.registry), media_type=CONTENT_TYPE_LATEST)
