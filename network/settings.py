"""``network.toml``: the settings of a network folder, declared once with limits and meaning."""

from __future__ import annotations

import re
import tomllib
from datetime import datetime
from pathlib import Path
from typing import Annotated, Any, Literal

from pydantic import AfterValidator, AwareDatetime, BaseModel, BeforeValidator, ConfigDict, Field, ValidationError

from network.connection_settings import ConnectionRules
from network.faults import Faults
from network.refresh_settings import RefreshSettings
from network.store_settings import StoreSettings

__all__ = ["FILE", "Defaults", "NetworkSettings", "line_of_setting", "read_settings"]

FILE = "network.toml"
INSTANT = re.compile(r"[0-9]{4}-[0-9]{2}-[0-9]{2}[T ][0-9]{2}:[0-9]{2}.*")


def _instant(value: object) -> object:
    """Take an ISO 8601 text or a TOML date-time, and nothing that merely could be turned into one."""
    if isinstance(value, datetime) or (isinstance(value, str) and INSTANT.fullmatch(value)):
        return value
    raise ValueError("is not a date and time; write it as 2027-03-01T06:40+01:00")


def _distinct(names: tuple[str, ...]) -> tuple[str, ...]:
    for name in names:
        if names.count(name) > 1:
            raise ValueError(f"names {name!r} more than once; keep one")
    return names


class Defaults(BaseModel):
    """What holds where a table says nothing."""

    model_config = ConfigDict(frozen=True, extra="forbid")

    minimum_connection: Annotated[
        float,
        Field(ge=0, le=2880, strict=True, description="Least connection time where stations.csv gives none, minutes."),
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
        tuple[Annotated[str, Field(min_length=1)], ...],
        AfterValidator(_distinct),
        Field(description="Fare classes, best first; without it, in the order in which fares.csv names them."),
    ] = ()
    defaults: Annotated[Defaults, Field(description="What holds where a table says nothing.")] = Defaults()
    refresh: Annotated[RefreshSettings, Field(description="When a night may go into force by itself.")] = (
        RefreshSettings()
    )
    store: Annotated[StoreSettings, Field(description="Which nights the store keeps.")] = StoreSettings()
    connections: Annotated[ConnectionRules, Field(description="Rules by which legs are joined into itineraries.")] = (
        ConnectionRules()
    )


def read_settings(folder: Path, faults: Faults) -> NetworkSettings | None:
    """Read ``network.toml``; note the faults and return None if there are any."""
    path = folder / FILE
    if not path.exists():
        faults.add(FILE, 0, "", "the file is missing; add it with name, currency and as_of")
        return None
    try:
        text = path.read_text(encoding="utf-8-sig")
        values = tomllib.loads(text)
    except OSError as error:
        faults.add(FILE, 0, "", f"cannot be read ({error.strerror}); put a readable file in its place")
        return None
    except UnicodeDecodeError as error:
        line = error.object.count(b"\n", 0, error.start) + 1
        faults.add(FILE, line, "", f"holds the byte 0x{error.object[error.start]:02x}, not UTF-8; save it as UTF-8")
        return None
    except tomllib.TOMLDecodeError as error:
        place = re.search(r"line (\d+)", str(error))
        line = int(place[1]) if place else text.count("\n") + 1 if "end of document" in str(error) else 0
        faults.add(FILE, line, "", f"is not valid TOML ({error}); correct it, one setting = value a line")
        return None
    except (ValueError, RecursionError):
        faults.add(FILE, 0, "", "holds a number too long or brackets too deep to be read; take them out")
        return None
    try:
        return NetworkSettings.model_validate(values)
    except ValidationError as errors:
        for problem in errors.errors():
            name = ".".join(str(part) for part in problem["loc"])
            keys = [part for part in problem["loc"] if isinstance(part, str)]
            faults.add(FILE, _line_of(text, keys), name, _problem(problem))
        return None


def line_of_setting(folder: Path, name: str) -> int:
    """Line of ``network.toml`` that sets a setting; 0 if none does."""
    return _line_of((folder / FILE).read_text(encoding="utf-8-sig"), [name])


def _line_of(text: str, keys: list[str]) -> int:
    """Line that sets a key, given with the tables around it, or else the innermost of these; 0 if none is set."""
    table: list[str] = []
    for number, line in enumerate(text.splitlines(), start=1):
        heading = re.match(r"\s*\[+([^\]]*)\]", line)
        setting = re.match(r"\s*([^=#\[]+)=", line)
        if heading:
            table = _parts(heading[1])
        if (heading and table == keys) or (setting and table + _parts(setting[1]) == keys):
            return number
    return _line_of(text, keys[:-1]) if len(keys) > 1 else 0


def _parts(key: str) -> list[str]:
    return [part.strip().strip("\"'") for part in key.split(".")]


def _problem(error: Any) -> str:
    kind, given = error["type"], error.get("input")
    if kind == "missing":
        return "the setting is missing; add it"
    if kind == "extra_forbidden":
        return "is not a setting known here; remove it or correct its name"
    if kind == "value_error":
        return f"{str(given)[:60]!r} {error['ctx']['error']}"
    if kind == "timezone_aware":
        return f"{str(given)!r} has no offset from UTC; write it as 2027-03-01T06:40+01:00"
    return f"{str(given)[:60]!r} cannot be taken; {error['msg'][0].lower()}{error['msg'][1:]}"
