"""Prices that moved since last night: how many, where in the calendar, which most, and why."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pandas as pd
import pyarrow.parquet

from legworth.refresh.changes_causes import Cause, PartQuestion, explain
from legworth.refresh.changes_legs import LegMatch, NightLegs
from legworth.refresh.changes_nights import NightTables, folder_of
from lp import LpOptions
from network import SettingError
from network.arrays import IntArray

__all__ = ["DateMoves", "ExplainOptions", "PriceChanges", "PriceMove", "price_changes"]

SOLVES = 3
"""Times that a part is solved for one leg: seats, demand, fares."""


@dataclass(frozen=True)
class ExplainOptions:
    """How much work may go into causes.

    Attributes
    ----------
    lp
        The program that tells causes apart; None for the one that the manifest of tonight names.
    parts
        Parts that may be solved again.
    products
        Products of these parts, counted once for every time one is solved, that may be solved in all.
    jobs, seconds
        Parts explained side by side, in processes of their own that together may take so many seconds; with no jobs
        one after the other in this process, for as long as it takes.
    scratch
        Folder for what these processes write meanwhile; that of the system if None.
    """

    lp: LpOptions | None = None
    parts: int = 12
    products: int = 6_000_000
    jobs: int = 0
    seconds: float = 600.0
    scratch: Path | None = None

    def __post_init__(self) -> None:
        if min(self.parts, self.products, self.jobs) < 0 or not self.seconds > 0:
            raise SettingError("parts, products and jobs that look for causes must not be negative, seconds above 0")


@dataclass(frozen=True)
class PriceMove:
    """A leg whose bid price moved.

    Attributes
    ----------
    leg, route, departs
        The leg, its stations and its local departure.
    then, now
        Bid prices, currency per seat; the value of the next seat where none is left.
    seats_then, seats_now
        Seats left.
    sold, added
        Seats sold since last night less those that came back, and seats of capacity added, less those taken away.
    money
        Size of the move times the seats left, the greater number of both nights, currency.
    cause
        Why.
    """

    leg: str
    route: str
    departs: str
    then: float
    now: float
    seats_then: int
    seats_now: int
    sold: int
    added: int
    money: float
    cause: Cause

    @property
    def move(self) -> float:
        """Price now less then, currency per seat."""
        return self.now - self.then


@dataclass(frozen=True)
class DateMoves:
    """Price moves on the departures of one local date: legs, and money by which their seats rose and fell, currency."""

    date: str
    legs: int
    moved: int
    up: float
    down: float


@dataclass(frozen=True)
class PriceChanges:
    """Prices of the departures on sale both nights.

    Attributes
    ----------
    legs, rose, fell
        Departures compared, and those whose price rose and fell.
    mean_then, mean_now
        Mean bid price, every seat left tonight counted once, currency per seat.
    half, most
        Half of the moves are no larger than this, and none is larger than that, currency per seat.
    moves
        The largest by money, with their causes.
    dates
        All moves by date of departure.
    """

    legs: int
    rose: int
    fell: int
    mean_then: float
    mean_now: float
    half: float
    most: float
    moves: tuple[PriceMove, ...]
    dates: tuple[DateMoves, ...]


def price_changes(
    nights: tuple[NightTables, NightTables],
    legs: tuple[NightLegs, NightLegs],
    match: LegMatch,
    top: int,
    options: ExplainOptions,
) -> PriceChanges:
    """Summarise price moves and explain the largest.

    Parameters
    ----------
    nights, legs
        Tonight and last night, and their legs.
    match
        Legs that both sell.
    top
        Moves to list and explain.
    options
        How much work may go into causes.
    """
    now, then = legs
    size = np.abs(match.move[match.move != 0])
    seats = now.remaining[match.now].astype(np.float64)
    weight = seats if seats.sum() > 0 else np.ones(len(seats))
    prices = [night.bid_price[at] for night, at in ((then, match.then), (now, match.now))]
    means = [float(np.average(price, weights=weight)) if len(price) else 0.0 for price in prices]
    chosen = match.ranked[:top]
    questions = _questions(nights, legs, match, chosen, options)
    causes = explain(questions, options.lp or LpOptions(), options.jobs, options.seconds, options.scratch)
    return PriceChanges(
        legs=len(match.now),
        rose=int((match.move > 0).sum()),
        fell=int((match.move < 0).sum()),
        mean_then=means[0],
        mean_now=means[1],
        half=float(np.median(size)) if len(size) else 0.0,
        most=float(size.max(initial=0.0)),
        moves=tuple(_move(legs, match, int(m), causes) for m in chosen),
        dates=tuple(_dates(now, match)),
    )


def _move(legs: tuple[NightLegs, NightLegs], match: LegMatch, m: int, causes: dict[str, Cause]) -> PriceMove:
    (now, then), n, b = legs, match.now[m], match.then[m]
    return PriceMove(
        leg=str(now.name[n]),
        route=str(now.route[n]),
        departs=str(now.local[n]),
        then=float(then.bid_price[b]),
        now=float(now.bid_price[n]),
        seats_then=int(then.remaining[b]),
        seats_now=int(now.remaining[n]),
        sold=int(now.sold[n] - then.sold[b]),
        added=int(now.capacity[n] - then.capacity[b]),
        money=float(match.money[m]),
        cause=causes[str(now.name[n])],
    )


def _dates(now: NightLegs, match: LegMatch) -> Iterable[DateMoves]:
    signed = np.sign(match.move) * match.money
    frame = pd.DataFrame(
        {
            "date": now.date[match.now],
            "legs": 1,
            "moved": (match.move != 0).astype(np.int64),
            "up": np.maximum(signed, 0.0),
            "down": np.maximum(-signed, 0.0),
        }
    )
    for date, count, moved, up, down in frame.groupby("date", sort=True).sum().itertuples(name=None):
        yield DateMoves(str(date), int(count), int(moved), float(up), float(down))


def _questions(
    nights: tuple[NightTables, NightTables],
    legs: tuple[NightLegs, NightLegs],
    match: LegMatch,
    chosen: IntArray,
    options: ExplainOptions,
) -> list[PartQuestion]:
    """Put the legs to be explained together by part, and share out the work that may be done, most money first."""
    (now, then), (tonight, last) = legs, nights
    of_part: dict[tuple[str, str], list[int]] = {}
    whole: dict[tuple[str, str], int] = {}
    work, full = 0, False
    for m in chosen.tolist():
        parts = str(then.part[match.then[m]]), str(now.part[match.now[m]])
        of_part.setdefault(parts, []).append(m)
        if parts not in whole and len(whole) >= options.parts:
            continue
        products = pyarrow.parquet.read_metadata(folder_of(last, parts[0]) / "connections.parquet").num_rows
        cost = products * (SOLVES if parts in whole else SOLVES + 1)
        full = full or work + cost > options.products
        if not full:
            work += cost
            whole[parts] = whole.get(parts, 0) + 1
    return [
        PartQuestion(
            last=folder_of(last, parts[0]),
            tonight=folder_of(tonight, parts[1]),
            legs=tuple(str(now.name[match.now[m]]) for m in members),
            then=tuple(float(then.bid_price[match.then[m]]) for m in members),
            now=tuple(float(now.bid_price[match.now[m]]) for m in members),
            whole=whole.get(parts, 0),
            why_not="the work set for solving parts again went to larger moves",
            prices_then=_prices(then, parts[0]),
            prices_now=_prices(now, parts[1]),
        )
        for parts, members in of_part.items()
    ]


def _prices(legs: NightLegs, part: str) -> pd.Series:
    chosen = legs.part == part
    return pd.Series(legs.bid_price[chosen], index=legs.name[chosen])
