"""Why a price moved: tonight's figures put into last night's network one group at a time.

From last night's price of a leg, four steps lead to tonight's, always in this order:

1. seats: tonight's seats left on this leg, everything else as last night;
2. demand: also tonight's demand to come for the products that use this leg;
3. fares: also tonight's fares of these products;
4. neighbours: everything else, which is the other legs, the products that do not use this leg, and what came or went.

After each of the first three the program of the part is solved again, and the price moves by what that step did; the
fourth is what is left of the whole move, so that the four add up to it exactly. Another order would share the move
differently where steps work on one another; the order is fixed so that nights can be compared.

Where solving the part again would cost too much, the leg is solved alone: its products at their fares less what last
night's prices ask for the other legs of their path. That is the first-order answer: the other legs hold their prices.
"""

from __future__ import annotations

import tempfile
import time
from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import FIRST_COMPLETED, Future, wait
from contextlib import closing
from dataclasses import dataclass, replace
from enum import StrEnum
from functools import partial
from pathlib import Path

import numpy as np
import pandas as pd

from legworth.refresh.changes_networks import NetworkPair, leg_alone
from legworth.refresh.processes import Processes
from lp import LpOptions, solve
from network import Demand, LegworthError, Network, read_folder
from network.arrays import FloatArray

__all__ = ["Cause", "Facts", "How", "PartQuestion", "explain"]

REPEATED = 1e-5
"""Share of the dearest price within which last night's prices must come out again before causes are told apart."""


class How(StrEnum):
    """How the causes of a move were found."""

    PART = "part"
    LEG = "leg"
    NOT = "not"


@dataclass(frozen=True)
class Facts:
    """What became of the inputs of a leg.

    Attributes
    ----------
    demand_then, demand_now
        Passengers to come for its products, last night and tonight.
    fares_changed
        Products, on sale both nights, whose fares changed.
    fare_then, fare_now
        Mean fares of these, weighted by tonight's demand, currency.
    products_added, products_gone
        Products of the leg that only tonight has, and that only last night had.
    neighbour, neighbour_move
        Of the legs that share an itinerary with it, the one whose price moved most, and that move, currency per seat;
        empty if none moved.
    """

    demand_then: float
    demand_now: float
    fares_changed: int
    fare_then: float
    fare_now: float
    products_added: int
    products_gone: int
    neighbour: str
    neighbour_move: float


@dataclass(frozen=True)
class Cause:
    """Why the price of a leg moved, currency per seat; the four steps add up to the move.

    Attributes
    ----------
    leg
        The leg.
    how
        Whether its part was solved again, the leg alone, or neither.
    seats, demand, fares, neighbours
        What each step did to the price; 0 where nothing was solved.
    why_not
        Why nothing, or only the leg alone, was solved; empty otherwise.
    facts
        What became of its inputs; None if they could not be read.
    """

    leg: str
    how: How
    seats: float = 0.0
    demand: float = 0.0
    fares: float = 0.0
    neighbours: float = 0.0
    why_not: str = ""
    facts: Facts | None = None


@dataclass(frozen=True, eq=False)
class PartQuestion:
    """Legs of one part to be explained.

    Attributes
    ----------
    last, tonight
        Network folders of the part, last night and tonight.
    legs
        Names of the legs in question.
    then, now
        Their published prices, currency.
    whole
        How many of them, from the first on, are to be found by solving the part again; the others alone.
    why_not
        Why the others are not.
    prices_then, prices_now
        Published prices of all legs of the part by name, last night and tonight.
    """

    last: Path
    tonight: Path
    legs: tuple[str, ...]
    then: tuple[float, ...]
    now: tuple[float, ...]
    whole: int
    why_not: str
    prices_then: pd.Series
    prices_now: pd.Series


def explain(
    questions: Sequence[PartQuestion],
    options: LpOptions,
    jobs: int = 0,
    seconds: float = 600.0,
    scratch: Path | None = None,
) -> dict[str, Cause]:
    """Find the causes for all legs asked about.

    Parameters
    ----------
    questions
        The legs, part by part.
    options
        The program that tells causes apart.
    jobs
        Parts side by side, in processes of their own; 0 for one after the other in this process.
    seconds
        Time that all processes together may take; what they have not answered by then stays unknown, and says so.
    scratch
        Folder for what these processes write meanwhile; that of the system if None.
    """
    if jobs:
        answers = _explained_apart(questions, options, jobs, seconds, scratch)
    else:
        answers = (explain_part(question, options) for question in questions)
    return {cause.leg: cause for causes in answers for cause in causes}


def _explained_apart(
    questions: Sequence[PartQuestion], options: LpOptions, jobs: int, seconds: float, place: Path | None
) -> Iterator[list[Cause]]:
    """Yield the answers of other processes: a solver that dies or hangs there cannot keep this one waiting."""
    left, flights = list(questions)[::-1], dict[Future[list[Cause]], PartQuestion]()
    ends = time.monotonic() + seconds
    with (
        tempfile.TemporaryDirectory(prefix="legworth-causes-", dir=place, ignore_cleanup_errors=True) as scratch,
        closing(Processes(max(min(jobs, len(left)), 1), Path(scratch))) as workers,
    ):
        while left or flights:
            while left and len(flights) < workers.capacity():
                question = left.pop()
                flights[workers.submit(partial(explain_part, options=options), question)] = question
            done, _ = wait(flights, timeout=max(ends - time.monotonic(), 0.0), return_when=FIRST_COMPLETED)
            if not done:
                break
            for future in done:
                question, died = flights.pop(future), future.exception() is not None
                yield _unknown(question, "the process that looked into it died") if died else future.result()
    for question in [*flights.values(), *left[::-1]]:
        yield _unknown(question, f"looking into it took more than {seconds:g} s")


def _unknown(question: PartQuestion, why_not: str) -> list[Cause]:
    return [Cause(leg, How.NOT, why_not=why_not) for leg in question.legs]


def explain_part(question: PartQuestion, options: LpOptions) -> list[Cause]:
    """Find the causes for the legs of one part; a failure is told as the reason why there is none."""
    try:
        pair = NetworkPair.of(*(read_folder(folder).network for folder in (question.last, question.tonight)))
        published = _on_positions(question.prices_then, pair)
        moved = _on_positions(question.prices_now, pair) - published
    except LegworthError as error:
        reason = f"its part cannot be read again ({str(error).splitlines()[0]})"
        return _unknown(question, reason)
    found = []
    why_not = question.why_not
    whole = question.whole
    if whole:
        reason = _not_repeated(pair.last, published, options)
        whole, why_not = (0, reason) if reason else (whole, why_not)
    for n, name in enumerate(question.legs):
        leg, move = pair.leg(name), question.now[n] - question.then[n]
        facts = _facts(pair, leg, moved)
        try:
            if n < whole:
                steps = _steps(pair, leg, question.then[n], published, options)
                found.append(_cause(name, How.PART, move, steps, "", facts))
            else:
                alone = leg_alone(pair, leg, published)
                steps = _steps(alone, 0, None, published[[leg]], options)
                found.append(_cause(name, How.LEG, move, steps, why_not, facts))
        except LegworthError as error:
            found.append(Cause(name, How.NOT, why_not=str(error).splitlines()[0], facts=facts))
    return found


def _on_positions(prices: pd.Series, pair: NetworkPair) -> FloatArray:
    """(L,) prices by name on the positions of a pair, 0 for legs that have none."""
    return prices.reindex(pd.Index(pair.last.legs.name)).fillna(0.0).to_numpy(dtype=np.float64)


def _not_repeated(network: Network, published: FloatArray, options: LpOptions) -> str:
    """Say why last night's prices do not come out again; nothing if they do."""
    try:
        found = solve(network, options, published).bid_price
    except LegworthError as error:
        return f"last night's part could not be solved again ({str(error).splitlines()[0]})"
    worst = float(np.abs(found - published).max(initial=0.0))
    if worst > REPEATED * max(float(published.max(initial=0.0)), 1.0):
        return f"last night's prices do not come out again with tonight's settings (off by up to {worst:,.2f})"
    return ""


def _steps(
    pair: NetworkPair, leg: int, then: float | None, start: FloatArray, options: LpOptions
) -> tuple[float, float, float]:
    """What seats, demand and fares do to the price of a leg, each on top of those before."""
    own = pair.products_of(leg)
    network, last, tonight = pair.last, pair.last, pair.tonight
    price = solve(network, options, start).bid_price[leg] if then is None else then
    remaining = last.remaining.copy()
    remaining[leg] = tonight.remaining[leg]
    swaps: list[tuple[bool, Callable[[Network], Network]]] = [
        (bool(remaining[leg] != last.remaining[leg]), lambda net: net.with_remaining(remaining)),
        (_demand_differs(last.demand, tonight.demand, own), lambda net: replace(net, demand=_swapped(pair, own))),
        (
            bool(np.any(own & (last.fare != tonight.fare))),
            lambda net: replace(net, fare=np.where(own, tonight.fare, last.fare)),
        ),
    ]
    effects = []
    for differs, swap in swaps:
        effect = 0.0
        if differs:
            network = swap(network)
            solution = solve(network, options, start)
            start = solution.bid_price
            effect, price = float(start[leg] - price), float(start[leg])
        effects.append(effect)
    return effects[0], effects[1], effects[2]


def _demand_differs(last: Demand, tonight: Demand, own: np.ndarray) -> bool:
    pairs = ((last.mean, tonight.mean), (last.deviation, tonight.deviation), (last.family, tonight.family))
    return any(np.any(own & (then != now)) for then, now in pairs)


def _swapped(pair: NetworkPair, own: np.ndarray) -> Demand:
    """Last night's demand with tonight's for some products."""
    last, tonight = pair.last.demand, pair.tonight.demand
    return Demand(
        np.where(own, tonight.mean, last.mean),
        np.where(own, tonight.deviation, last.deviation),
        np.where(own, tonight.family, last.family),
    )


def _cause(leg: str, how: How, move: float, steps: tuple[float, float, float], why_not: str, facts: Facts) -> Cause:
    seats, demand, fares = steps
    return Cause(leg, how, seats, demand, fares, move - (seats + demand + fares), why_not, facts)


def _facts(pair: NetworkPair, leg: int, moved: FloatArray) -> Facts:
    own = pair.products_of(leg)
    last, tonight = pair.last, pair.tonight
    beside = np.where(last.leg_load(own.astype(np.float64)) > 0, moved, 0.0)
    beside[leg] = 0.0
    greatest = int(np.argmax(np.abs(beside)))
    both = pair.on_sale_last & pair.on_sale_tonight
    changed = own & both & (last.fare != tonight.fare)
    weight = tonight.demand.expected[changed]
    weight = weight if weight.sum() > 0 else np.ones(len(weight))
    mean_fares = [
        float(np.average(night.fare[changed], weights=weight)) if changed.any() else 0.0 for night in (last, tonight)
    ]
    return Facts(
        demand_then=float(last.demand.expected[own].sum()),
        demand_now=float(tonight.demand.expected[own].sum()),
        fares_changed=int(changed.sum()),
        fare_then=mean_fares[0],
        fare_now=mean_fares[1],
        products_added=int((own & pair.on_sale_tonight & ~pair.on_sale_last).sum()),
        products_gone=int((own & pair.on_sale_last & ~pair.on_sale_tonight).sum()),
        neighbour=str(last.legs.name[greatest]) if beside[greatest] else "",
        neighbour_move=float(beside[greatest]),
    )
