"""``[connections]`` of ``network.toml``: the rules by which legs are joined into itineraries."""

from __future__ import annotations

from typing import Annotated

from pydantic import AfterValidator, BaseModel, ConfigDict, Field

__all__ = ["ConnectionRules", "KindMinimum"]

MINUTES_OF_WEEK = 7 * 24 * 60


class KindMinimum(BaseModel):
    """Least connection time between legs of two kinds."""

    model_config = ConfigDict(frozen=True, extra="forbid")

    arriving: Annotated[str, Field(min_length=1, description="Kind of the leg that arrives, as in legs.csv.")]
    departing: Annotated[str, Field(min_length=1, description="Kind of the leg that departs.")]
    minutes: Annotated[
        float, Field(ge=0, le=MINUTES_OF_WEEK, strict=True, description="Least time between the two, minutes.")
    ]


def _each_pair_once(minima: tuple[KindMinimum, ...]) -> tuple[KindMinimum, ...]:
    pairs = [(minimum.arriving, minimum.departing) for minimum in minima]
    for pair in pairs:
        if pairs.count(pair) > 1:
            raise ValueError(f"gives the pair {pair[0]!r}, {pair[1]!r} more than once; keep one")
    return minima


class ConnectionRules(BaseModel):
    """Which itineraries `legworth schedule` makes of legs.

    A leg alone is always an itinerary, and so are legs that one vehicle runs one after the other; the rules are
    for connections, where passengers change. The least connection time of each station stands in
    ``stations.csv``, with its default in ``[defaults]``.
    """

    model_config = ConfigDict(frozen=True, extra="forbid")

    most_legs: Annotated[
        int,
        Field(
            ge=1,
            le=3,
            strict=True,
            description="Most legs of an itinerary, 1 to 3; legs on which passengers keep their seat count as one.",
        ),
    ] = 2
    most_through: Annotated[
        int,
        Field(
            ge=1,
            le=100,
            strict=True,
            description="Most legs that one vehicle runs one after the other and that are sold as one ride.",
        ),
    ] = 12
    minimum_by_kinds: Annotated[
        tuple[KindMinimum, ...],
        AfterValidator(_each_pair_once),
        Field(
            description="Least connection times between kinds of legs, such as "
            '`[{arriving = "rail", departing = "air", minutes = 90}]`; the longer of this and the station\'s holds.'
        ),
    ] = ()
    maximum_connection: Annotated[
        float,
        Field(ge=0, le=MINUTES_OF_WEEK, strict=True, description="Longest time between two legs, minutes."),
    ] = 180.0
    overnight: Annotated[
        bool,
        Field(
            strict=True,
            description="Whether a connection may leave on another date than it arrives, by the connecting "
            "station's clock.",
        ),
    ] = True
    detour: Annotated[
        float,
        Field(
            ge=1,
            le=1000,
            strict=True,
            description="Greatest length of a connection over that of the direct way, both along great circles; "
            "where a station has no coordinates there is no limit.",
        ),
    ] = 1.5
    keep_dominated: Annotated[
        bool,
        Field(
            strict=True,
            description="Whether to keep connections that another itinerary between the same stations makes pointless: "
            "it leaves no earlier, arrives no later and has no more legs, and is better in one of the three.",
        ),
    ] = False
    most_per_day: Annotated[
        int | None,
        Field(
            ge=1,
            strict=True,
            description="Most itineraries between two stations on one local date of departure: the quickest, then "
            "those of fewer legs; without it all. A ride without a change takes a place but is never dropped.",
        ),
    ] = None
