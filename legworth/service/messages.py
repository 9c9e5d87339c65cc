"""What the service takes and answers; the OpenAPI description is made from these."""

from __future__ import annotations

from datetime import datetime
from typing import Annotated, Any, Literal, Self

from pydantic import BaseModel, ConfigDict, Field, model_validator

from legworth.service.wording import NAME, TEXT

__all__ = [
    "NAMED",
    "Answer",
    "Answers",
    "Ask",
    "AskMany",
    "CancelAnswer",
    "Counted",
    "Health",
    "ItineraryView",
    "LatestCounts",
    "LegCount",
    "LegView",
    "NightView",
    "ProductView",
    "Recorded",
    "Sell",
    "Snapshot",
]

Name = Annotated[str, Field(min_length=1, max_length=200, pattern=NAME)]
ClassName = Annotated[str, Field(min_length=1, max_length=200)]
Words = Annotated[str, Field(min_length=1, max_length=1_000, pattern=TEXT)]
Fare = Annotated[float, Field(ge=0, le=1e9, allow_inf_nan=False)]
Seats = Annotated[int, Field(ge=1, le=10_000)]


NAMED = 50
"""Legs that an answer names of a kind; it tells how many there are."""


class _Message(BaseModel):
    model_config = ConfigDict(frozen=True, extra="forbid", strict=True)


ONE_OF_EACH: dict[str, Any] = {
    "oneOf": [
        {"required": ["itinerary"], "properties": {"itinerary": {"type": "string"}, "legs": {"type": "null"}}},
        {
            "required": ["legs"],
            "properties": {"legs": {"type": "array", "uniqueItems": True}, "itinerary": {"type": "null"}},
        },
    ],
    "anyOf": [
        {"required": ["fare"], "properties": {"fare": {"type": "number"}}},
        {"required": ["fare_class"], "properties": {"fare_class": {"type": "string"}}},
    ],
}
"""What the check of `Ask` says, in JSON Schema."""


class Ask(_Message):
    """One request of a customer: an itinerary or a list of legs, a fare class or a fare, and the party's size."""

    model_config = ConfigDict(json_schema_extra=ONE_OF_EACH)

    itinerary: Annotated[Name | None, Field(description="Name of the itinerary.")] = None
    legs: Annotated[
        tuple[Name, ...] | None, Field(min_length=1, max_length=12, description="Its legs in travel order, instead.")
    ] = None
    fare_class: Annotated[ClassName | None, Field(description="Fare class; its fare is looked up.")] = None
    fare: Annotated[Fare | None, Field(description="Fare of one passenger, currency; before the class's.")] = None
    seats: Annotated[Seats, Field(description="Passengers who travel together.")] = 1

    @model_validator(mode="after")
    def _one_of_each(self) -> Self:
        if (self.itinerary is None) == (self.legs is None):
            raise ValueError("give either an itinerary or its legs")
        if self.fare is None and self.fare_class is None:
            raise ValueError("give a fare class, a fare, or both")
        if self.legs is not None and len(set(self.legs)) != len(self.legs):
            raise ValueError("name every leg once")
        return self


class AskMany(_Message):
    """Many requests at once, column by column: the n-th entries of all columns are one request."""

    itinerary: Annotated[tuple[str, ...], Field(min_length=1, description="Names of the itineraries.")]
    fare_class: Annotated[tuple[str | None, ...] | None, Field(description="Fare classes.")] = None
    fare: Annotated[tuple[Fare | None, ...] | None, Field(description="Fares of one passenger, currency.")] = None
    seats: Annotated[tuple[Seats, ...] | None, Field(description="Passengers; 1 without this column.")] = None
    sentences: Annotated[bool, Field(description="Whether every answer is also said in a sentence.")] = False

    @model_validator(mode="after")
    def _as_long(self) -> Self:
        if self.fare is None and self.fare_class is None:
            raise ValueError("give a column fare_class, a column fare, or both")
        for name in ("fare_class", "fare", "seats"):
            column = getattr(self, name)
            if column is not None and len(column) != len(self.itinerary):
                raise ValueError(f"column {name} has {len(column)} entries, itinerary has {len(self.itinerary)}")
        return self


class Sell(Ask):
    """An order to sell: judged as a question is, and carried out if accepted."""

    at_any_price: Annotated[
        bool, Field(description="Sell where seats remain, whatever the price says; the journal keeps that it was so.")
    ] = False


class Cancel(_Message):
    """An order to give seats of a sale back."""

    seats: Annotated[Seats | None, Field(description="Seats given back on every leg; else all that are left.")] = None


class LegCount(_Message):
    """Count of one leg in the carrier's own inventory."""

    leg: Name
    capacity: Annotated[int, Field(ge=0, le=100_000, description="Seats authorised for sale.")]
    sold: Annotated[int, Field(ge=0, le=100_000, description="Seats sold.")]


class Snapshot(_Message):
    """Counts of the carrier's own inventory, which replace those of the ledger."""

    why: Annotated[Words, Field(description="Where the counts come from, for the audit.")]
    counts: Annotated[tuple[LegCount, ...], Field(min_length=1, max_length=100_000)]
    known_legs_only: Annotated[
        bool, Field(description="Refuse the whole snapshot if the night in force does not sell one of its legs.")
    ] = False

    @model_validator(mode="after")
    def _once(self) -> Self:
        if len({count.leg for count in self.counts}) != len(self.counts):
            raise ValueError("count every leg once")
        return self


class Answer(BaseModel):
    """Accepted or refused, and why."""

    accepted: bool
    reason: Annotated[
        str, Field(description="Why, in one word; unknown_product if the itinerary is not sold in the fare class.")
    ]
    itinerary: str | None
    legs: list[str]
    fare_class: str | None
    fare: Annotated[float | None, Field(description="Fare of one passenger, currency.")]
    seats: int
    displacement: Annotated[float | None, Field(description="Price of the party's seats, all legs together, currency.")]
    leg_prices: Annotated[list[float], Field(description="The same leg by leg.")]
    binding_leg: Annotated[str | None, Field(description="The leg that costs most, or that stands in the way.")]
    seats_left: Annotated[int, Field(description="Fewest seats left on any leg of the path, before this request.")]
    sentence: str
    night: Annotated[str, Field(description="The night whose prices judged.")]


class Answers(BaseModel):
    """Answers to many requests, column by column."""

    accepted: list[bool]
    reason: list[str]
    fare: list[float | None]
    displacement: list[float | None]
    binding_leg: list[str | None]
    sentence: Annotated[list[str] | None, Field(description="Only if asked for.")]
    night: Annotated[str, Field(description="The night whose prices judged.")]


class Recorded(Answer):
    """Answer to an order to sell, as the journal keeps it."""

    key: Annotated[str, Field(description="The caller's key: the same again gives the same answer.")]
    repeated: Annotated[bool, Field(description="Whether the order had been carried out before.")]
    at_any_price: Annotated[bool, Field(description="Whether it was sold although its price refused it.")]


class CancelAnswer(BaseModel):
    """Answer to an order to give seats back."""

    accepted: bool
    sale: str
    seats: int
    left: Annotated[int, Field(description="Seats of the sale that are left.")]
    sentence: str
    key: str
    repeated: bool


class Counted(BaseModel):
    """What a snapshot changed."""

    moved: Annotated[int, Field(description="Legs whose count moved; each has an audit row.")]
    unknown_legs: Annotated[
        int,
        Field(
            description="Legs of the snapshot that the night in force does not sell: flown, not on sale yet, or "
            "misspelt. Their counts are kept for a night that sells them."
        ),
    ]
    unknown: Annotated[list[str], Field(description=f"The first {NAMED} of them, in the order of the snapshot.")]
    oversold_legs: Annotated[
        int,
        Field(description="Legs of the snapshot with more seats sold than authorised; none of theirs is sold here."),
    ]
    oversold: Annotated[list[str], Field(description=f"The first {NAMED} of them, in the order of the snapshot.")]
    night: Annotated[str | None, Field(description="The night in force; none if there is none, and all are unknown.")]


class LegView(BaseModel):
    """A leg: seats and price now."""

    leg: str
    origin: str
    destination: str
    departs: datetime
    arrives: datetime
    capacity: int
    sold: int
    remaining: int
    bid_price: Annotated[
        float | None, Field(description="Value of the last seat at the snapshot, currency; none if it has no price.")
    ]
    price_now: Annotated[float | None, Field(description="Price of one seat now; none if departed or sold out.")]
    night: str


class ProductView(BaseModel):
    """An itinerary in a fare class."""

    fare_class: str
    fare: float
    answer: Annotated[str, Field(description="accept or refuse, for one passenger now.")]
    reason: str


class ItineraryView(BaseModel):
    """An itinerary: its legs, what one seat displaces now, and its classes."""

    itinerary: str
    legs: list[str]
    remaining: int
    displacement: Annotated[float | None, Field(description="Price of one seat on all legs now, currency.")]
    products: list[ProductView]
    night: str


class NightView(BaseModel):
    """A published night."""

    night: str
    as_of: datetime
    published: datetime
    in_force: bool
    legs: int
    products: int


class LatestCounts(BaseModel):
    """The latest snapshot of counts that this service took."""

    at: Annotated[datetime, Field(description="When, by the machine's clock.")]
    legs: Annotated[int, Field(description="Legs that it counted.")]
    unknown_legs: Annotated[int, Field(description="Of these, legs that the night in force did not sell.")]
    oversold_legs: Annotated[int, Field(description="Of these, legs with more seats sold than authorised.")]


class Health(BaseModel):
    """Whether the service can answer, and by which night."""

    status: Annotated[
        Literal["ok", "old night", "in trouble", "no sound night", "no night"],
        Field(
            description="With no night, or no sound one, questions are answered with 503; with an old one a refresh "
            "was missed."
        ),
    ]
    night: str | None
    as_of: datetime | None
    legs: Annotated[int, Field(description="Legs that the night sells; 0 without one.")]
    ledger_legs: Annotated[
        int,
        Field(description="Legs in the ledger: those of the night, of earlier ones, and others that were counted."),
    ]
    latest_counts: Annotated[
        LatestCounts | None,
        Field(description="The latest snapshot of counts that this service took; none since it started."),
    ]
    waiting: Annotated[int, Field(description="Orders that wait for the ledger.")]
    troubles: Annotated[list[str], Field(description="What is wrong, one line each; the log says why.")]
