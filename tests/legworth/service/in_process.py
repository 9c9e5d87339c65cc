"""The application in this process, asked as over the wire."""

from __future__ import annotations

from collections.abc import AsyncIterator
from contextlib import asynccontextmanager
from dataclasses import dataclass
from datetime import datetime
from itertools import count
from pathlib import Path
from typing import Any

import httpx
from fastapi import FastAPI

from legworth.service.app import make_app
from legworth.service.settings import ServiceSettings
from legworth.service.state import ServiceState
from legworth.service.tokens import TokenFile
from legworth.store import Store
from tests.legworth.service.stores import AS_OF

__all__ = ["Running", "running"]

KEYS = count()


@dataclass(frozen=True)
class Running:
    """A running application and a token that permits everything."""

    app: FastAPI
    client: httpx.AsyncClient
    token: str

    @property
    def state(self) -> ServiceState:
        """What it holds."""
        found: ServiceState = self.app.state.service
        return found

    async def get(self, path: str, **more: Any) -> httpx.Response:
        """Look something up."""
        return await self.client.get(path, **more)

    async def ask(self, **question: Any) -> httpx.Response:
        """Ask one question."""
        return await self.client.post("/v1/decisions", json=question)

    async def order(self, path: str, body: Any, key: str | None = None, token: str | None = None) -> httpx.Response:
        """Hand an order in, under a new key unless one is given."""
        headers = {"Authorization": f"Bearer {token or self.token}", "Idempotency-Key": key or f"key-{next(KEYS)}"}
        return await self.client.post(path, json=body, headers=headers)

    async def sell(self, key: str | None = None, **order: Any) -> httpx.Response:
        """Sell seats."""
        return await self.order("/v1/sales", order, key)

    async def count(self, *counts: tuple[str, int, int]) -> httpx.Response:
        """Overwrite counts: leg, capacity, sold."""
        rows = [{"leg": leg, "capacity": capacity, "sold": sold} for leg, capacity, sold in counts]
        headers = {"Authorization": f"Bearer {self.token}"}
        return await self.client.put("/v1/seat-counts", json={"why": "a test", "counts": rows}, headers=headers)


@asynccontextmanager
async def running(store: Path, at: datetime = AS_OF, **settings: Any) -> AsyncIterator[Running]:
    """Run the application on a store."""
    tokens = TokenFile(store / "tokens.json")
    if any(token.holder == "tester" for token in tokens.tokens()):
        tokens.withdraw("tester")
    token = tokens.make("tester", ["ask", "sell", "count"])
    app = make_app(Store.open(store), ServiceSettings(**{"follow_seconds": 0.05, **settings}), at)
    async with app.router.lifespan_context(app):
        transport = httpx.ASGITransport(app, raise_app_exceptions=False)
        async with httpx.AsyncClient(transport=transport, base_url="http://service") as client:
            yield Running(app, client, token)
