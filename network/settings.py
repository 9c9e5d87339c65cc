"""``network.toml``: the settings of a network folder, declared once with limits and meaning."""

from __future__ import annotations

import re
import tomllib
from datetime import datetime
from pathlib import Path
from typing import Annotated, Any, Literal

from pydantic import AwareDatetime, BaseModel, BeforeValidator, ConfigDict, Field, ValidationError

from network.faults import Faults

__all__ = ["Defaults", "NetworkSettings", "read_settings"]

FILE = "network.toml"


def _instant(value: object) -> object:
    """Take an ISO 8601 text or a TOML date-time, and nothing that merely could be turned into one."""
    if isinstance(value, datetime | str):
        return value
    raise ValueError("write it as 2027-03-01T06:40+01:00")


class Defaults(BaseModel):
    """What holds where a table says nothing."""

    model_config = ConfigDict(frozen=True, extra="forbid")

    minimum_connection: Annotated[
        float,
        Field(ge=0, le=2880, description="Least connection time where stations.csv gives none, minutes."),
    ] = 30.0
    demand_family: Annotated[
        Literal["auto", "poisson", "negative_binomial", "gamma", "normal"],
        Field(description="Distribution of demand to come; auto chooses by the variance of each product."),
    ] = "auto"


class NetworkSettings(BaseModel):
    """The whole of ``network.toml``."""

    model_config = ConfigDict(frozen=True, extra="forbid")

    name: Annotated[str, Field(min_length=1, max_length=200, description="Name of the network, for people.")]
    currency: Annotated[str, Field(min_length=1, max_length=20, description="Currency of every fare and price.")]
    as_of: Annotated[
        AwareDatetime,
        BeforeValidator(_instant),
        Field(description="Instant of the snapshot, ISO 8601 with offset."),
    ]
    fare_classes: Annotated[
        tuple[str, ...],
        Field(description="Fare classes, best first; without it, in the order in which fares.csv names them."),
    ] = ()
    defaults: Annotated[Defaults, Field(description="What holds where a table says nothing.")] = Defaults()


def read_settings(folder: Path, faults: Faults) -> NetworkSettings | None:
    """Read ``network.toml``; note the faults and return None if there are any."""
    path = folder / FILE
    if not path.is_file():
        faults.add(FILE, 0, "", "the file is missing; add it with name, currency and as_of")
        return None
    try:
        text = path.read_text(encoding="utf-8")
        values = tomllib.loads(text)
    except UnicodeDecodeError:
        faults.add(FILE, 0, "", "is not UTF-8 text; save it as UTF-8")
        return None
    except tomllib.TOMLDecodeError as error:
        place = re.search(r"line (\d+)", str(error))
        faults.add(FILE, int(place[1]) if place else 0, "", f"is not valid TOML: {error}")
        return None
    try:
        return NetworkSettings.model_validate(values)
    except ValidationError as errors:
        for problem in errors.errors():
            name = ".".join(str(part) for part in problem["loc"])
            faults.add(FILE, _line_of(text, problem["loc"]), name, _problem(problem))
        return None


def _line_of(text: str, location: tuple[Any, ...]) -> int:
    """Line that sets the last named key of a location, 0 if the file does not set it."""
    for name in reversed([part for part in location if isinstance(part, str)]):
        for number, line in enumerate(text.splitlines(), start=1):
            if re.match(rf"\s*(\[\s*)?{re.escape(name)}\s*(=|\])", line):
                return number
    return 0


def _problem(error: Any) -> str:
    kind, given = error["type"], error.get("input")
    if kind == "missing":
        return "the setting is missing; add it"
    if kind == "extra_forbidden":
        return "is not a setting known here; remove it or correct its name"
    if kind == "timezone_aware":
        return f"{str(given)!r} has no offset from UTC; write it as 2027-03-01T06:40+01:00"
    return f"{str(given)[:60]!r}: {error['msg'][0].lower()}{error['msg'][1:]}"
