"""How a page is answered: who may see it, headers that keep it safe, and errors as pages."""

from __future__ import annotations

import asyncio
from collections.abc import Callable, Coroutine
from dataclasses import dataclass, field
from http import HTTPStatus
from typing import Any
from urllib.parse import quote

import structlog
from fastapi import APIRouter, Request
from fastapi.exceptions import RequestValidationError
from fastapi.routing import APIRoute
from starlette.exceptions import HTTPException
from starlette.responses import RedirectResponse, Response
from starlette.routing import Match, Route
from starlette.types import Scope

from legworth.service.interface import state_of
from legworth.service.pages.night_index import NightIndex
from legworth.service.pages.preparing import PagesWaitError, Preparation
from legworth.service.pages.rendering import html
from legworth.service.pages.solving import Solver
from legworth.service.served_night import ServedNight
from legworth.service.served_part import ServedPart
from legworth.service.wording import fault_words
from network.errors import LegworthError

__all__ = ["COOKIE", "HEADERS", "NoSuchPage", "PageRoute", "Planner", "PlannerState", "page_router", "planner_of"]

COOKIE = "legworth_token"
POLICY = (
    "default-src 'none'; script-src 'self'; style-src 'self'; img-src 'self'; connect-src 'self'; "
    "form-action 'self'; base-uri 'none'; frame-ancestors 'none'"
)
HEADERS = {
    "Content-Security-Policy": POLICY,
    "X-Content-Type-Options": "nosniff",
    "Referrer-Policy": "same-origin",
    "Cross-Origin-Opener-Policy": "same-origin",
    "Cross-Origin-Resource-Policy": "same-origin",
    "Cache-Control": "private, no-cache",
}

_Handler = Callable[[Request], Coroutine[Any, Any, Response]]


@dataclass(eq=False)
class PlannerState:
    """What the pages share: the night that they show, and the solves asked for."""

    preparation: Preparation = field(default_factory=Preparation)
    solver: Solver = field(default_factory=Solver)


@dataclass(frozen=True)
class Planner:
    """What one page is made from; one night throughout.

    Attributes
    ----------
    request
        The request.
    night, index
        The night that is shown, as requests are judged by it and as lists are made from it: the one in force, or the
        one shown before as long as the lists of that are not made.
    trouble
        Why the lists of the night in force cannot be made, if so.
    now
        The instant by the service's clock, seconds since 1970-01-01 UTC.
    """

    request: Request
    night: ServedNight
    index: NightIndex
    now: float
    trouble: str

    async def part(self, name: str) -> ServedPart:
        """A part of the night."""
        return self.night.ready(name) or await self.night.part(name)

    @property
    def left(self) -> dict[str, int]:
        """Seats left by leg, as the ledger has them."""
        return state_of(self.request).seats.left

    async def page(self, template: str, **model: Any) -> Response:
        """Render a page away from the loop that answers requests."""
        model |= {"night": self.night, "index": self.index, "trouble": self.trouble}
        return await asyncio.to_thread(html, self.request, template, **model)


async def planner_of(request: Request) -> Planner:
    """Take the night to show: the one in force if its lists are made, else the one shown before.

    Raises
    ------
    NoNightError
        If none is in force.
    PagesWaitError
        If the lists of the first one are not made yet.
    """
    state, preparation = state_of(request), request.app.state.planner.preparation
    shown = await preparation.latest(state.night())
    return Planner(request, shown.night, shown.index, state.now(), preparation.trouble)


def permitted(request: Request) -> bool:
    """Whether the holder of the request may look: anyone, unless the settings say that reading needs a token."""
    state = state_of(request)
    if not state.settings.read_needs_token:
        return True
    scheme, _, sent = request.headers.get("authorization", "").partition(" ")
    token = sent if scheme.lower() == "bearer" else request.cookies.get(COOKIE, "")
    holder = state.tokens.holder_of(token) if token else None
    return holder is not None and "ask" in holder.permissions


class PageRoute(APIRoute):
    """A route whose answers and errors are pages."""

    def get_route_handler(self) -> _Handler:
        """Wrap the handler of the route."""
        answer, is_open = super().get_route_handler(), self.path.startswith("/sign-")

        async def handle(request: Request) -> Response:
            try:
                if is_open or permitted(request):
                    response = await answer(request)
                else:
                    response = _to_sign_in(request)
            except RequestValidationError as error:
                faults = [f"{each['loc'][-1]}: {fault_words(each)}" for each in error.errors()]
                response = _fault(request, HTTPStatus.BAD_REQUEST, "\n".join(faults))
            except HTTPException as error:
                response = _fault(request, error.status_code, str(error.detail))
            except PagesWaitError as error:
                response = html(request, "preparing.html", status=error.http_status, line=str(error))
                response.headers["Retry-After"] = "2"
            except LegworthError as error:
                response = _fault(request, error.http_status, str(error))
            except Exception as error:
                structlog.get_logger().error("page failed", path=request.url.path, exc_info=error)
                response = _fault(request, 500, "The service failed on this page; the log says why.")
            return _with_headers(response)

        return handle


def page_router() -> APIRouter:
    """A router of pages, which the description of the interface does not list."""
    return APIRouter(route_class=PageRoute, include_in_schema=False)


class NoSuchPage(Route):
    """Answers addresses that nothing else answers, except those of programs, with a page."""

    def __init__(self) -> None:
        super().__init__("/{anything:path}", self._answer, methods=["GET"], include_in_schema=False)

    def matches(self, scope: Scope) -> tuple[Match, Scope]:
        """Leave the addresses of programs, and all that is no GET, to the application."""
        path = scope.get("path", "")
        if scope["type"] != "http" or scope["method"] != "GET" or path.startswith(("/v1", "/static")):
            return Match.NONE, {}
        return super().matches(scope)

    async def _answer(self, request: Request) -> Response:
        return _with_headers(_fault(request, HTTPStatus.NOT_FOUND, "There is no such page."))


def _to_sign_in(request: Request) -> Response:
    target = request.url.path + (f"?{request.url.query}" if request.url.query else "")
    return RedirectResponse(f"/sign-in?next={quote(target, safe='')}", HTTPStatus.SEE_OTHER)


def _fault(request: Request, status: int, detail: str) -> Response:
    title = HTTPStatus(status).phrase
    return html(request, "fault.html", status=status, title=title, lines=detail.splitlines())


def _with_headers(response: Response) -> Response:
    for name, value in HEADERS.items():
        response.headers.setdefault(name, value)
    return response
