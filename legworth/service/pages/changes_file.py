"""``changes.json`` of a night as the pages read it: what they show of it, section by section, and what it lacks.

An older version may have written less, and a file may be damaged. A section that lacks something is not shown, and the
page says what it lacks; all others are shown.
"""

from __future__ import annotations

import json
from dataclasses import dataclass
from typing import Annotated, Any, Literal

from pydantic import BaseModel, ConfigDict, Field, TypeAdapter, ValidationError

from legworth.service.wording import fault_words
from legworth.store import Night

__all__ = ["ReportedChanges", "read_changes"]

FILE = "changes.json"
MOST_FAULTS = 3
"""Faults of a section that are told; one cause tends to make many."""


class _Section(BaseModel):
    """Some of what `legworth.refresh.changes.Changes` holds under the same names; its docstrings say what they mean."""

    model_config = ConfigDict(frozen=True, strict=True, allow_inf_nan=False)


class LastNight(_Section):
    """The night compared with."""

    night: str
    as_of: Annotated[str, Field(pattern=r"^\d{4}-\d\d-\d\dT\d\d:\d\d")]


class Cause(_Section):
    """Why a price moved."""

    how: Literal["part", "leg", "not"]
    seats: float
    demand: float
    fares: float
    neighbours: float


class Move(_Section):
    """A price that moved."""

    leg: str
    route: str
    departs: str
    then: float
    now: float
    money: float
    cause: Cause


class Prices(_Section):
    """Prices of the departures on sale both nights."""

    legs: int
    rose: int
    fell: int
    moves: list[Move]


class Departure(_Section):
    """A departure by its name."""

    leg: str


class Departures(_Section):
    """What became of departures."""

    on_sale: int
    added: int
    departed: int
    gone: list[Departure]
    gone_count: int
    gone_sold: int
    retimed: list[Departure]
    retimed_count: int
    resized: list[Departure]
    resized_count: int


class Flip(_Section):
    """A product that network control closed or opened."""

    itinerary: str
    fare_class: str
    fare: float
    displacement_then: float
    displacement: float
    passengers: float
    worth: float


class FlipTotals(_Section):
    """All products that went one way."""

    products: int


class Products(_Section):
    """Products closed and opened."""

    closed: list[Flip]
    opened: list[Flip]
    closed_totals: FlipTotals
    opened_totals: FlipTotals


class Revenue(_Section):
    """Revenue to come."""

    tonight: float | None
    parts: int
    departures: int
    then: float
    now: float
    seats_sold: int
    sold_worth: float


@dataclass(frozen=True)
class ReportedChanges:
    """What the report of a night says.

    Attributes
    ----------
    last
        The night compared with; None if there was none.
    note
        What makes the comparison doubtful; empty as a rule.
    prices, departures, products, revenue
        Sections; None where the report has nothing to say, or cannot be read.
    unread
        Names of those of the above that cannot be read.
    faults
        One line each: why something cannot be read.
    """

    last: LastNight | None = None
    note: str = ""
    prices: Prices | None = None
    departures: Departures | None = None
    products: Products | None = None
    revenue: Revenue | None = None
    unread: frozenset[str] = frozenset()
    faults: tuple[str, ...] = ()


SECTIONS: dict[str, TypeAdapter[Any]] = {
    "last": TypeAdapter(LastNight | None),
    "note": TypeAdapter(str),
    "prices": TypeAdapter(Prices | None),
    "departures": TypeAdapter(Departures | None),
    "products": TypeAdapter(Products),
    "revenue": TypeAdapter(Revenue),
}


def read_changes(night: Night) -> ReportedChanges:
    """Read the report of a night, as far as it can be read."""
    try:
        found = json.loads((night.folder / FILE).read_bytes())
        if not isinstance(found, dict):
            raise ValueError("it is no JSON object")
    except FileNotFoundError:
        lost = FILE in night.manifest.files
        line = "has been lost" if lost else "was not written; the log of the refresh says why"
        return _unreadable(line)
    except (OSError, ValueError, RecursionError) as error:
        return _unreadable(f"cannot be read ({error})")
    read: dict[str, Any] = {}
    faults: list[str] = []
    for name, kind in SECTIONS.items():
        if name not in found:
            faults.append(f"{FILE} has no {name}")
            continue
        try:
            read[name] = kind.validate_python(found[name])
        except ValidationError as error:
            faults += _lines(name, error)
    return ReportedChanges(**read, unread=frozenset(SECTIONS) - set(read), faults=tuple(faults))


def _what(error: Any) -> str:
    """What is wrong with a value; nobody mends it by hand."""
    return fault_words(error).partition("; ")[0]


def _unreadable(why: str) -> ReportedChanges:
    return ReportedChanges(unread=frozenset(SECTIONS), faults=(f"{FILE} {why}",))


def _lines(name: str, error: ValidationError) -> list[str]:
    """One line for each of the first faults of a section, and one for the rest."""
    found = error.errors(include_url=False, include_input=False)
    lines = []
    for each in found[:MOST_FAULTS]:
        where = ".".join(map(str, (name, *each["loc"])))
        missing = each["type"] == "missing"
        lines.append(f"{FILE} has no {where}" if missing else f"{where} of {FILE} is wrong: it {_what(each)}")
    if len(found) > MOST_FAULTS:
        lines.append(f"{FILE} has {len(found) - MOST_FAULTS:,} more faults in {name}")
    return lines
