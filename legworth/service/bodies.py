"""JSON bodies: read, checked and described, with one step from bytes to message."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any, TypeVar

from fastapi import Request
from pydantic import BaseModel, ValidationError
from pydantic.json_schema import models_json_schema
from starlette.exceptions import HTTPException

from legworth.service.errors import MalformedError
from legworth.service.wording import fault_words, names_at

__all__ = ["FAULTS_TOLD", "body_schemas", "described_body", "fault_line", "lines_told", "read_body"]

JSON = "application/json"
REFERENCE = "#/components/schemas/{model}"
FAULTS_TOLD = 50
"""Faults of one request that are told; a body of a million wrong entries does not get an answer as long."""

M = TypeVar("M", bound=BaseModel)


async def read_body(request: Request, model: type[M]) -> M:
    """Read the body of a request as a message.

    Raises
    ------
    HTTPException
        If the body is not said to be JSON (415) or is larger than the limit (413).
    MalformedError
        If it is no JSON, or does not fit the message.
    """
    kind = request.headers.get("content-type", "")
    if kind != JSON and kind.partition(";")[0].strip().lower() != JSON:
        raise HTTPException(415, f"the body must be JSON; send it as Content-Type: {JSON}")
    body = await request.body()
    try:
        return model.model_validate_json(body)
    except ValidationError as error:
        raise MalformedError(faults_of(error, model)) from None


def faults_of(error: ValidationError, model: type[BaseModel]) -> list[str]:
    """One line a fault of a message, the first ones if there are many."""
    reported = error.errors(include_url=False, include_input=False)
    # A list whose entries are all wrong is reported as too short besides.
    wrong = {each["loc"][:end] for each in reported for end in range(1, len(each["loc"]))}
    found = [each for each in reported if each["type"] != "too_short" or each["loc"] not in wrong]
    lines = [
        fault_line(("body", *each["loc"]), fault_words(each, names_at(model, each["loc"])))
        for each in found[:FAULTS_TOLD]
    ]
    return lines_told(lines, len(found))


def lines_told(lines: Sequence[str], count: int) -> list[str]:
    """The lines of the first faults, and how many more there are."""
    told = list(lines[:FAULTS_TOLD])
    return [*told, f"and {count - len(told):,} more"] if count > len(told) else told


def fault_line(place: tuple[Any, ...], what: str) -> str:
    """One fault in a line; names that cannot be written as UTF-8 are shown with question marks."""
    where = ".".join(str(part)[:100] for part in place)
    return f"{where}: {what}".encode(errors="replace").decode()


def described_body(model: type[BaseModel]) -> dict[str, Any]:
    """Describe, for OpenAPI, the body that `read_body` reads."""
    schema = {"$ref": REFERENCE.format(model=model.__name__)}
    return {"requestBody": {"required": True, "content": {JSON: {"schema": schema}}}}


def body_schemas(*models: type[BaseModel]) -> dict[str, Any]:
    """Schemas of some messages and of all that they hold, by name."""
    _, schema = models_json_schema([(model, "validation") for model in models], ref_template=REFERENCE)
    return dict(schema["$defs"])
