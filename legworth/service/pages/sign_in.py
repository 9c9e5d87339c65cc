"""Signing in: a token goes into a cookie that no script can read and no other site can send."""

from __future__ import annotations

from typing import Annotated
from urllib.parse import parse_qs

from fastapi import Query, Request
from starlette.responses import RedirectResponse, Response

from legworth.service.interface import state_of
from legworth.service.pages.rendering import html
from legworth.service.pages.routes import COOKIE, page_router

__all__ = ["pages"]

pages = page_router()
SECONDS = 12 * 3600
"""A working day; then the token is asked for again."""

Next = Annotated[str, Query(alias="next", max_length=2000)]


def _inside(target: str) -> str:
    """Return an address of this service; the start page in place of any other."""
    inside = target.startswith("/") and not target.startswith(("//", "/\\")) and target.isprintable()
    return target if inside else "/"


@pages.get("/sign-in")
async def form(request: Request, target: Next = "/") -> Response:
    """Ask for the token."""
    return html(request, "sign_in.html", target=_inside(target), wrong="")


@pages.post("/sign-in")
async def sign_in(request: Request) -> Response:
    """Take the token."""
    try:
        sent = parse_qs((await request.body()).decode("utf-8", "replace"), max_num_fields=8)
    except ValueError:
        sent = {}
    token, target = sent.get("token", [""])[0].strip(), _inside(sent.get("next", ["/"])[0])
    if request.headers.get("sec-fetch-site", "same-origin") not in ("same-origin", "none"):
        return html(request, "sign_in.html", status=403, target="/", wrong="Sign in from this page.")
    holder = state_of(request).tokens.holder_of(token) if token else None
    if holder is None or "ask" not in holder.permissions:
        why = "The token is not known." if holder is None else "This token does not permit to ask."
        return html(request, "sign_in.html", status=401, target=target, wrong=why)
    response = RedirectResponse(target, 303)
    secure = request.url.scheme == "https"
    response.set_cookie(COOKIE, token, max_age=SECONDS, path="/", httponly=True, samesite="strict", secure=secure)
    return response


@pages.post("/sign-out")
async def sign_out(request: Request) -> Response:
    """Forget the token."""
    response = RedirectResponse("/sign-in", 303)
    response.delete_cookie(COOKIE, path="/", httponly=True, samesite="strict")
    return response
