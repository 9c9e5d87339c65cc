"""Limits that hold before a request is read: size of its body, and requests per client and second."""

from __future__ import annotations

from collections import OrderedDict
from collections.abc import Callable
from time import monotonic

from starlette.exceptions import HTTPException
from starlette.types import ASGIApp, Message, Receive, Scope, Send

from legworth.service.problems import problem

__all__ = ["BodyLimit", "RateLimit"]

CLIENTS = 100_000
"""Clients remembered; the longest silent are forgotten first."""
DIGITS = 15
"""Of a length; a longer number is beyond every limit, and not worth reading."""


class BodyLimit:
    """Refuses a body above the limit unread; one without declared length as soon as it passes the limit.

    Parameters
    ----------
    app
        What answers the others.
    limit
        Bytes.
    """

    def __init__(self, app: ASGIApp, limit: int) -> None:
        self.app = app
        self.limit = limit
        self.detail = f"the body is larger than {limit:,} bytes; send less at once"

    async def __call__(self, scope: Scope, receive: Receive, send: Send) -> None:
        """Pass a request on if its body is small enough."""
        if scope["type"] != "http":
            await self.app(scope, receive, send)
            return
        declared = next((value for name, value in scope["headers"] if name == b"content-length"), None)
        if declared is not None:
            answer = self.app
            if not declared.isdigit():
                answer = problem(400, "the length of the body is no number; correct Content-Length")
            elif len(declared) > DIGITS or int(declared) > self.limit:
                answer = problem(413, self.detail, headers={"Connection": "close"})
            await answer(scope, receive, send)
            return
        seen = 0

        async def counted() -> Message:
            nonlocal seen
            message = await receive()
            seen += len(message.get("body", b""))
            if seen > self.limit:
                raise HTTPException(413, self.detail, {"Connection": "close"})
            return message

        await self.app(scope, counted, send)


class RateLimit:
    """Turns clients away that send more than their share: a bucket of tokens each, filled at a steady rate.

    Parameters
    ----------
    app
        What answers the others.
    rate
        Requests per second of one client.
    burst
        Requests that may come at once.
    clock
        Seconds.
    """

    def __init__(self, app: ASGIApp, rate: float, burst: int, clock: Callable[[], float] = monotonic) -> None:
        self.app = app
        self.rate = rate
        self.burst = burst
        self.clock = clock
        self._buckets: OrderedDict[str, tuple[float, float]] = OrderedDict()

    async def __call__(self, scope: Scope, receive: Receive, send: Send) -> None:
        """Pass a request on if the client's bucket is not empty."""
        if scope["type"] == "http" and self.rate > 0:
            wait = self._take(scope["client"][0] if scope.get("client") else "")
            if wait > 0:
                headers = {"Retry-After": str(int(wait) + 1)}
                detail = f"more than {self.rate:g} requests per second; send fewer, or many in one batch"
                await problem(429, detail, headers=headers)(scope, receive, send)
                return
        await self.app(scope, receive, send)

    def _take(self, client: str) -> float:
        """Take one request from the client's bucket; seconds to wait if it is empty."""
        now = self.clock()
        left, then = self._buckets.pop(client, (float(self.burst), now))
        left = min(left + (now - then) * self.rate, float(self.burst))
        wait = 0.0 if left >= 1 else (1 - left) / self.rate
        self._buckets[client] = (left - 1 if wait == 0 else left, now)
        if len(self._buckets) > CLIENTS:
            self._buckets.popitem(last=False)
        return wait
