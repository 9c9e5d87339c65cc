"""The interface of the service, version 1."""

from __future__ import annotations

from typing import Annotated, Any

import orjson
from fastapi import APIRouter, Depends, Header, Path, Request
from starlette.responses import Response

from legworth.service.asking import ask, at_any_price, find
from legworth.service.asking_many import answer_many
from legworth.service.bodies import described_body, read_body
from legworth.service.counted_legs import CountedLegs
from legworth.service.errors import ForbiddenError, MalformedError, RefusedError, UnknownError
from legworth.service.looking import health_of, itinerary_view, leg_view, night_view
from legworth.service.messages import (
    Answer,
    Answers,
    Ask,
    AskMany,
    Cancel,
    CancelAnswer,
    Counted,
    Health,
    ItineraryView,
    LegView,
    NightView,
    Recorded,
    Sell,
    Snapshot,
)
from legworth.service.orders import Cancellation, Overwriting, Sale, SeatCount
from legworth.service.problems import described_problems
from legworth.service.served_part import Question, ServedPart
from legworth.service.state import ServiceState
from legworth.service.wording import KEY
from network.errors import LegworthError

__all__ = ["BODIES", "OPEN", "Permit", "interface", "permit", "state_of"]

BODIES = (Ask, AskMany, Sell, Cancel, Snapshot)
"""Messages that are read by `legworth.service.bodies.read_body`."""
BEARER = "bearer"
OPEN: dict[str, Any] = {"security": [{}, {BEARER: []}]}
CLOSED: dict[str, Any] = {"security": [{BEARER: []}]}

Key = Annotated[
    str,
    Header(
        alias="Idempotency-Key",
        min_length=1,
        max_length=200,
        pattern=KEY,
        description="The caller's own key of this order: sent again, it is carried out once and gives the same answer.",
    ),
]
SaleKey = Annotated[
    str, Path(min_length=1, max_length=200, pattern=KEY, description="Key under which the seats were sold.")
]
Name = Annotated[str, Path(min_length=1, max_length=200)]

interface = APIRouter(prefix="/v1", responses=described_problems(400, 401, 403, 429, 503))


def state_of(request: Request) -> ServiceState:
    """State of the running service."""
    found: ServiceState = request.app.state.service
    return found


State = Annotated[ServiceState, Depends(state_of)]


def permit(request: Request, permission: str) -> str:
    """Let a request pass if its token permits what it asks for; gives the name of the token's holder.

    Raises
    ------
    RefusedError
        If a token is needed and missing or unknown.
    ForbiddenError
        If the token does not permit it.
    """
    state = state_of(request)
    sent = request.headers.get("authorization")
    if sent is None:
        if permission == "ask" and not state.settings.read_needs_token:
            return ""
        raise RefusedError("a bearer token is needed; send it as Authorization: Bearer TOKEN")
    scheme, _, token = sent.partition(" ")
    holder = state.tokens.holder_of(token.strip()) if scheme.lower() == BEARER else None
    if holder is None:
        raise RefusedError("the token is not known; make one with legworth tokens make")
    if permission not in holder.permissions:
        raise ForbiddenError(f"the token of {holder.holder!r} does not permit to {permission}")
    return holder.holder


class Permit:
    """`permit` as a dependency."""

    def __init__(self, permission: str) -> None:
        self.permission = permission

    async def __call__(self, request: Request) -> str:
        """Name of the holder."""
        return permit(request, self.permission)


asks, sells, counts = (Depends(Permit(permission)) for permission in ("ask", "sell", "count"))


def _json(body: Any) -> Response:
    return Response(orjson.dumps(body, option=orjson.OPT_SERIALIZE_NUMPY), media_type="application/json")


@interface.get("/health", tags=["look"])
async def health(state: State) -> Health:
    """Whether the service can answer, and by which night; never needs a token."""
    return health_of(state)


# Questions take the request alone and read it by hand: they come by the thousand a second.
@interface.post(
    "/decisions",
    response_model=Answer,
    responses=described_problems(404, 413, 415, 422),
    tags=["ask"],
    openapi_extra=OPEN | described_body(Ask),
)
async def decision(request: Request) -> Response:
    """Accept or refuse one request by the night in force and the seats left now; nothing is sold."""
    permit(request, "ask")
    state = state_of(request)
    asked = await read_body(request, Ask)
    return _json(await ask(state.night(), asked, state.seats.left, state.now()))


@interface.post(
    "/decisions/batch",
    response_model=Answers,
    responses=described_problems(413, 415, 422),
    tags=["ask"],
    openapi_extra=OPEN | described_body(AskMany),
)
async def decisions(request: Request) -> Response:
    """Accept or refuse many requests, each by itself; nothing is sold."""
    permit(request, "ask")
    state = state_of(request)
    asked = await read_body(request, AskMany)
    count, limit = len(asked.itinerary), state.settings.batch_limit
    if count > limit:
        raise MalformedError([f"body.itinerary: {count:,} requests are more than {limit:,}; split them"])
    return _json(await answer_many(state.night(), asked, state.seats.left, state.now(), state.turns))


@interface.post(
    "/sales",
    response_model=Recorded,
    responses=described_problems(404, 409, 413, 415, 422),
    tags=["sell"],
    openapi_extra=CLOSED | described_body(Sell),
)
async def sell(request: Request, who: Annotated[str, sells], key: Key, state: State) -> Response:
    """Sell seats on all legs or none, if the request is accepted; the answer is on the disk before it is sent."""
    asked = await read_body(request, Sell)
    wanted = asked.model_dump(mode="json", exclude_defaults=True)
    try:
        night = state.night()
        part, question, known = await find(night, asked, state.now())
    except LegworthError as error:
        # A key that has its answer gets it again, whatever has become of the night since.
        order = Sale(key, (), asked.seats, wanted, _never, who, hindrance=error)
    else:
        judge = _Judge(state, part, question, known, night.name, asked.at_any_price)
        order = Sale(key, question.names, question.seats, wanted, judge, who)
    outcome = await state.carry_out(order)
    return _json(outcome.answer | {"key": key, "repeated": outcome.repeated})


class _Judge:
    """Judges a sale when its turn has come: by the seats and the hour of then."""

    def __init__(
        self, state: ServiceState, part: ServedPart, question: Question, known: bool, night: str, any_price: bool
    ) -> None:
        self.state, self.part, self.question, self.known = state, part, question, known
        self.night, self.any_price = night, any_price

    def __call__(self, left: Any) -> dict[str, Any]:
        question = self.question.at(self.state.now())
        answer = self.part.answer(question, left, self.known) | {"night": self.night, "at_any_price": False}
        return at_any_price(answer) if self.any_price else answer


def _never(left: Any) -> dict[str, Any]:
    raise AssertionError("an order that cannot be judged was judged")


@interface.post(
    "/sales/{sale:path}/cancellations",
    response_model=CancelAnswer,
    responses=described_problems(404, 409, 413, 415, 422),
    tags=["sell"],
    openapi_extra=CLOSED | described_body(Cancel),
)
async def cancel(request: Request, sale: SaleKey, who: Annotated[str, sells], key: Key, state: State) -> Response:
    """Give seats of a sale back, on all its legs."""
    asked = await read_body(request, Cancel)
    outcome = await state.carry_out(Cancellation(key, sale, asked.seats, who))
    return _json(outcome.answer | {"key": key, "repeated": outcome.repeated})


@interface.put(
    "/seat-counts",
    responses=described_problems(413, 415, 422),
    tags=["sell"],
    openapi_extra=CLOSED | described_body(Snapshot),
)
async def overwrite(request: Request, who: Annotated[str, counts], state: State) -> Counted:
    """Overwrite counts by those of the carrier's own inventory; every leg that moves gets an audit row."""
    asked = await read_body(request, Snapshot)
    taken = tuple(SeatCount(count.leg, count.capacity, count.sold) for count in asked.counts)
    found = CountedLegs.of(taken, state.night() if asked.known_legs_only else state.served)
    if asked.known_legs_only and found.unknown:
        raise MalformedError(found.faults(), found.refusal())
    moved = await state.overwrite(Overwriting(taken, who, asked.why))
    state.latest_counts = found
    request.app.state.metrics.note_counts(found)
    return found.answer(len(moved))


look: dict[str, Any] = {"tags": ["look"], "dependencies": [asks], "openapi_extra": OPEN}


@interface.get("/legs/{leg:path}", responses=described_problems(404, 422), **look)
async def leg(leg: Name, state: State) -> LegView:
    """A leg: seats and price now."""
    night = state.night()
    name = night.legs.part_of(leg)
    if name is None:
        raise UnknownError(f"leg {leg!r} is not on sale; correct its name")
    return leg_view(await night.part(name), leg, state, state.now(), night.name)


@interface.get("/itineraries/{itinerary:path}", responses=described_problems(404, 422), **look)
async def itinerary(itinerary: Name, state: State) -> ItineraryView:
    """An itinerary: what one seat displaces now, and which classes are open."""
    night = state.night()
    name = night.itineraries.part_of(itinerary)
    if name is None:
        raise UnknownError(f"itinerary {itinerary!r} is not on sale; correct its name")
    return itinerary_view(await night.part(name), itinerary, state, state.now(), night.name)


@interface.get("/nights", **look)
def nights(state: State) -> list[NightView]:
    """All nights of the store, oldest first."""
    return [night_view(night, state) for night in state.store.nights()]


@interface.get("/nights/{night}", responses=described_problems(404, 422), **look)
def one_night(night: Name, state: State) -> NightView:
    """One night of the store."""
    for each in state.store.nights():
        if each.name == night:
            return night_view(each, state)
    raise UnknownError(f"there is no night {night!r}; ask for all of them")
