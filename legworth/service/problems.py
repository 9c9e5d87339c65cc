"""One shape for every error: problem details as RFC 9457 describes them."""

from __future__ import annotations

from http import HTTPStatus
from typing import Any

import orjson
import structlog
from fastapi import FastAPI, Request
from fastapi.exceptions import RequestValidationError
from pydantic import BaseModel, Field
from starlette.exceptions import HTTPException
from starlette.responses import Response

from network.errors import InputError, LegworthError

__all__ = ["PROBLEM_TYPE", "Problem", "install_problems", "problem"]

PROBLEM_TYPE = "application/problem+json"


class Problem(BaseModel):
    """What went wrong (RFC 9457)."""

    type: str = Field("about:blank", description="Always about:blank: the status says what kind of problem it is.")
    title: str = Field(description="Name of the status.")
    status: int = Field(description="HTTP status.")
    detail: str = Field(description="What is wrong and what would mend it.")
    faults: list[str] = Field(default=[], description="Every fault of the request, one line each.")


def problem(
    status: int, detail: str, faults: list[str] | None = None, headers: dict[str, str] | None = None
) -> Response:
    """Make the response."""
    body = {
        "type": "about:blank",
        "title": HTTPStatus(status).phrase,
        "status": status,
        "detail": detail,
        "faults": faults or [],
    }
    return Response(orjson.dumps(body), status, headers, PROBLEM_TYPE)


def install_problems(app: FastAPI) -> None:
    """Answer every error of an application in this shape."""

    @app.exception_handler(LegworthError)
    async def meant(_request: Request, error: LegworthError) -> Response:
        faults = [str(fault) for fault in error.faults] if isinstance(error, InputError) else []
        headers = {"Retry-After": "1"} if error.http_status == HTTPStatus.SERVICE_UNAVAILABLE else None
        return problem(error.http_status, str(error), faults, headers)

    @app.exception_handler(RequestValidationError)
    async def malformed(_request: Request, error: RequestValidationError) -> Response:
        faults = [_fault(each) for each in error.errors()]
        return problem(422, "the request does not fit its description; correct the faults listed", faults)

    @app.exception_handler(HTTPException)
    async def refused(_request: Request, error: HTTPException) -> Response:
        headers = dict(error.headers) if error.headers else None
        return problem(error.status_code, str(error.detail), headers=headers)

    @app.exception_handler(Exception)
    async def unmeant(request: Request, error: Exception) -> Response:
        structlog.get_logger().error("request failed", path=request.url.path, exc_info=error)
        return problem(500, "the service failed on this request; nothing was sold by it, as far as it knows")


def _fault(error: Any) -> str:
    place = ".".join(str(part) for part in error["loc"])
    return f"{place}: {error['msg'][0].lower()}{error['msg'][1:]}"
