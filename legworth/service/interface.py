"""The interface of the service, version 1."""

from __future__ import annotations

from typing import Annotated, Any

import orjson
from fastapi import APIRouter, Depends, Header, Path, Request
from fastapi.security import HTTPAuthorizationCredentials, HTTPBearer
from starlette.responses import Response

from legworth.service.asking import answer_many, ask, at_any_price, find
from legworth.service.errors import ForbiddenError, RefusedError, UnknownError
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
from legworth.service.problems import PROBLEM_TYPE, Problem
from legworth.service.state import ServiceState
from legworth.service.tokens import Token
from network import SettingError

__all__ = ["interface"]

bearer = HTTPBearer(auto_error=False, description="A token made with `legworth tokens make`.")
Key = Annotated[
    str,
    Header(
        alias="Idempotency-Key",
        min_length=1,
        max_length=200,
        pattern=r"^[\x21-\x7e]+$",
        description="The caller's own key of this order: sent again, it is carried out once and gives the same answer.",
    ),
]


def _problems(*statuses: int) -> dict[int | str, dict[str, Any]]:
    content = {PROBLEM_TYPE: {"schema": {"$ref": "#/components/schemas/Problem"}}}
    return {status: {"model": Problem, "content": content} for status in statuses}


interface = APIRouter(responses=_problems(400, 401, 403, 413, 422, 429, 503))


def state_of(request: Request) -> ServiceState:
    """State of the running service."""
    found: ServiceState = request.app.state.service
    return found


State = Annotated[ServiceState, Depends(state_of)]
Credentials = Annotated[HTTPAuthorizationCredentials | None, Depends(bearer)]


class Permit:
    """Lets a request pass if its token permits what it asks for; gives the name of the token's holder."""

    def __init__(self, permission: str) -> None:
        self.permission = permission

    async def __call__(self, state: State, credentials: Credentials) -> str:
        """Name of the holder.

        Raises
        ------
        RefusedError
            If a token is needed and missing or unknown.
        ForbiddenError
            If the token does not permit it.
        """
        if credentials is None:
            if self.permission == "ask" and not state.settings.read_needs_token:
                return ""
            raise RefusedError("a bearer token is needed; send it as Authorization: Bearer TOKEN")
        token: Token | None = state.tokens.holder_of(credentials.credentials)
        if token is None:
            raise RefusedError("the token is not known; make one with legworth tokens make")
        if self.permission not in token.permissions:
            raise ForbiddenError(f"the token of {token.holder!r} does not permit to {self.permission}")
        return token.holder


asks, sells, counts = (Depends(Permit(permission)) for permission in ("ask", "sell", "count"))


def _json(body: Any) -> Response:
    return Response(orjson.dumps(body, option=orjson.OPT_SERIALIZE_NUMPY), media_type="application/json")


@interface.get("/health", tags=["look"])
async def health(state: State) -> Health:
    """Whether the service can answer, and by which night."""
    return health_of(state)


@interface.post("/decisions", response_model=Answer, responses=_problems(404), tags=["ask"], dependencies=[asks])
async def decision(asked: Ask, state: State) -> Response:
    """Accept or refuse one request by the night in force and the seats left now; nothing is sold."""
    return _json(await ask(state.night(), asked, state.seats.left, state.now()))


@interface.post("/decisions/batch", response_model=Answers, tags=["ask"], dependencies=[asks])
async def decisions(asked: AskMany, state: State) -> Response:
    """Accept or refuse many requests, each by itself; nothing is sold."""
    if len(asked.itinerary) > state.settings.batch_limit:
        raise SettingError(
            f"{len(asked.itinerary):,} requests are more than {state.settings.batch_limit:,}; split them"
        )
    return _json(await answer_many(state.night(), asked, state.seats.left, state.now()))


@interface.post("/sales", response_model=Recorded, responses=_problems(404, 409), tags=["sell"], dependencies=[sells])
async def sell(asked: Sell, key: Key, state: State) -> Response:
    """Sell seats on all legs or none, if the request is accepted; the answer is on the disk before it is sent."""
    night = state.night()
    part, question, known = await find(night, asked, state.now())

    def judge(left: Any) -> dict[str, Any]:
        answer = part.answer(question, left, known) | {"night": night.name, "at_any_price": asked.at_any_price}
        return at_any_price(answer) if asked.at_any_price else answer

    order = Sale(key, question.names, question.seats, asked.model_dump(mode="json"), judge)
    outcome = await state.carry_out(order)
    return _json(outcome.answer | {"key": key, "repeated": outcome.repeated})


SaleKey = Annotated[str, Path(min_length=1, max_length=200, description="Key under which the seats were sold.")]


@interface.post(
    "/sales/{sale}/cancellations",
    response_model=CancelAnswer,
    responses=_problems(404, 409),
    tags=["sell"],
    dependencies=[sells],
)
async def cancel(sale: SaleKey, asked: Cancel, key: Key, state: State) -> Response:
    """Give seats of a sale back, on all its legs."""
    outcome = await state.carry_out(Cancellation(key, sale, asked.seats))
    return _json(outcome.answer | {"key": key, "repeated": outcome.repeated})


@interface.put("/seat-counts", tags=["sell"])
async def overwrite(asked: Snapshot, state: State, who: Annotated[str, counts]) -> Counted:
    """Overwrite counts by those of the carrier's own inventory; every leg that moves gets an audit row."""
    taken = tuple(SeatCount(count.leg, count.capacity, count.sold) for count in asked.counts)
    moved = await state.overwrite(Overwriting(taken, who, asked.why))
    return Counted(moved=len(moved))


Name = Annotated[str, Path(min_length=1, max_length=200)]


@interface.get("/legs/{leg}", responses=_problems(404), tags=["look"], dependencies=[asks])
async def leg(leg: Name, state: State) -> LegView:
    """A leg: seats and price now."""
    night = state.night()
    name = night.legs.part_of(leg)
    if name is None:
        raise UnknownError(f"leg {leg!r} is not on sale; correct its name")
    return leg_view(await night.part(name), leg, state, state.now())


@interface.get("/itineraries/{itinerary}", responses=_problems(404), tags=["look"], dependencies=[asks])
async def itinerary(itinerary: Name, state: State) -> ItineraryView:
    """An itinerary: what one seat displaces now, and which classes are open."""
    night = state.night()
    name = night.itineraries.part_of(itinerary)
    if name is None:
        raise UnknownError(f"itinerary {itinerary!r} is not on sale; correct its name")
    return itinerary_view(await night.part(name), itinerary, state, state.now())


@interface.get("/nights", tags=["look"], dependencies=[asks])
def nights(state: State) -> list[NightView]:
    """All nights of the store, oldest first."""
    return [night_view(night, state) for night in state.store.nights()]


@interface.get("/nights/{night}", responses=_problems(404), tags=["look"], dependencies=[asks])
def one_night(night: Name, state: State) -> NightView:
    """One night of the store."""
    for each in state.store.nights():
        if each.name == night:
            return night_view(each, state)
    raise UnknownError(f"there is no night {night!r}; ask for all of them")
