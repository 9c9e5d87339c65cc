"""The OpenAPI description: what FastAPI sees, and what this service reads and answers by hand."""

from __future__ import annotations

from typing import Any

from fastapi import FastAPI
from fastapi.openapi.utils import get_openapi

from legworth.service.bodies import body_schemas
from legworth.service.interface import BEARER, BODIES
from legworth.service.problems import Problem

__all__ = ["describe"]


def describe(app: FastAPI) -> None:
    """Let an application describe itself in full."""

    def described() -> dict[str, Any]:
        if app.openapi_schema is None:
            found = get_openapi(
                title=app.title, version=app.version, description=app.description, routes=app.router.routes
            )
            parts = found.setdefault("components", {})
            parts["schemas"] = {**parts.get("schemas", {}), **body_schemas(*BODIES, Problem)}
            words = "A token made with `legworth tokens make`."
            parts["securitySchemes"] = {BEARER: {"type": "http", "scheme": "bearer", "description": words}}
            app.openapi_schema = found
        return app.openapi_schema

    app.openapi = described  # type: ignore[method-assign]
