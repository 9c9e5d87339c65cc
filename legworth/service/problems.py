"""One shape for every error: problem details as RFC 9457 describes them."""

from __future__ import annotations

from http import HTTPStatus
from typing import Any

import orjson
import structlog
from fastapi import FastAPI, Request
from fastapi.exceptions import RequestValidationError
from pydantic import BaseModel, ConfigDict, Field
from starlette.exceptions import HTTPException
from starlette.requests import ClientDisconnect
from starlette.responses import Response
from starlette.types import ASGIApp, Message, Receive, Scope, Send

from legworth.service.bodies import FAULTS_TOLD, fault_line
from legworth.service.errors import MalformedError
from legworth.service.wording import fault_words
from network.errors import InputError, LegworthError

__all__ = ["PROBLEM_TYPE", "LastResort", "Problem", "described_problems", "install_problems", "problem"]

PROBLEM_TYPE = "application/problem+json"
MEANINGS = {
    400: "The request cannot be read.",
    401: "A bearer token is needed, or the one sent is not known.",
    403: "The token does not permit this.",
    404: "Something named in the request is not on sale, or not there.",
    409: "The key was used for another order.",
    413: "The body is larger than the limit; it was not read.",
    415: "The body is not said to be JSON.",
    422: "The request does not fit its description, or cannot be judged.",
    429: "This client sends more than its share.",
    503: "No night is in force, or the ledger cannot be written; the same again later is safe.",
}

PLAIN = {
    404: "there is no such address; /v1/openapi.json describes those there are",
    405: "this address does not take this method; the header Allow names those that it takes",
}


class Problem(BaseModel):
    """What went wrong (RFC 9457)."""

    model_config = ConfigDict(extra="forbid")

    type: str = Field(description="Always about:blank: the status says what kind of problem it is.")
    title: str = Field(description="Name of the status.")
    status: int = Field(description="HTTP status.")
    detail: str = Field(description="What is wrong and what would mend it.")
    faults: list[str] = Field(description="Every fault of the request, one line each; at most 50, and how many more.")


def described_problems(*statuses: int) -> dict[int | str, dict[str, Any]]:
    """Describe, for OpenAPI, answers of this shape."""
    content = {PROBLEM_TYPE: {"schema": {"$ref": "#/components/schemas/Problem"}}}
    return {status: {"description": MEANINGS[status], "content": content} for status in statuses}


def problem(
    status: int, detail: str, faults: list[str] | None = None, headers: dict[str, str] | None = None
) -> Response:
    """Make the response."""
    return Response(problem_body(status, detail, faults), status, headers, PROBLEM_TYPE)


def problem_body(status: int, detail: str, faults: list[str] | None = None) -> bytes:
    """Make the body alone."""
    said = detail.encode(errors="replace").decode()
    title = HTTPStatus(status).phrase
    return orjson.dumps(
        {"type": "about:blank", "title": title, "status": status, "detail": said, "faults": faults or []}
    )


def install_problems(app: FastAPI) -> None:
    """Answer every error of an application in this shape."""

    @app.exception_handler(LegworthError)
    async def meant(_request: Request, error: LegworthError) -> Response:
        faults = [str(fault) for fault in error.faults[:FAULTS_TOLD]] if isinstance(error, InputError) else []
        if isinstance(error, MalformedError):
            faults = error.faults
        headers = {}
        if error.http_status == HTTPStatus.SERVICE_UNAVAILABLE:
            headers["Retry-After"] = "1"
        if error.http_status == HTTPStatus.UNAUTHORIZED:
            headers["WWW-Authenticate"] = "Bearer"
        return problem(error.http_status, str(error), faults, headers)

    @app.exception_handler(RequestValidationError)
    async def malformed(_request: Request, error: RequestValidationError) -> Response:
        faults = [fault_line(each["loc"], fault_words(each)) for each in error.errors()[:FAULTS_TOLD]]
        return problem(422, str(MalformedError([])), faults)

    @app.exception_handler(HTTPException)
    async def refused(_request: Request, error: HTTPException) -> Response:
        headers = dict(error.headers) if error.headers else None
        detail = PLAIN.get(error.status_code, "") if error.detail == HTTPStatus(error.status_code).phrase else ""
        return problem(error.status_code, detail or str(error.detail), headers=headers)


class LastResort:
    """Answers an error that nobody meant with status 500, and writes one line of log; no body, no variables.

    Parameters
    ----------
    app
        What failed.
    """

    def __init__(self, app: ASGIApp) -> None:
        self.app = app

    async def __call__(self, scope: Scope, receive: Receive, send: Send) -> None:
        """Pass a request on, and answer it if that fails."""
        if scope["type"] != "http":
            await self.app(scope, receive, send)
            return
        begun = False

        async def noted(message: Message) -> None:
            nonlocal begun
            begun = True
            await send(message)

        try:
            await self.app(scope, receive, noted)
        except ClientDisconnect:
            return
        except Exception as error:
            structlog.get_logger().error("request failed", path=scope["path"][:200], exc_info=error)
            if begun:
                raise
            detail = "the service failed on this request; an order sent again under the same key is carried out once"
            await problem(500, detail)(scope, receive, send)
