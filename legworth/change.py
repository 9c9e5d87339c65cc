"""What a change is worth: the network priced again with other seats, fares or legs, exactly."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from legworth.change_account import ChangeAccount, account_of_change, matched_names
from lp import LpOptions, Method, NetworkSolution, solve_network
from network import Network, SettingError
from network.arrays import FloatArray, IntArray

__all__ = ["ChangeStudy", "LegMove", "study_change"]

MOST_MOVED = 10


@dataclass(frozen=True)
class LegMove:
    """A leg whose bid price or expected passengers move."""

    leg: str
    price_before: float
    price_after: float
    sales_before: float
    sales_after: float


@dataclass(frozen=True)
class ChangeStudy:
    """Before and after.

    Attributes
    ----------
    account
        What is changed.
    before, after
        Optimum of the linear program, currency.
    moves
        Legs whose prices move most.
    lost_itineraries
        Itineraries that can no longer be sold.
    freed
        Passengers whom lost itineraries would have carried on other legs, by leg, most first; seats that the
        optimum after the change has for others.
    """

    account: ChangeAccount
    before: float
    after: float
    moves: tuple[LegMove, ...]
    lost_itineraries: int
    freed: tuple[tuple[str, float], ...]


def study_change(before: Network, after: Network, options: LpOptions, jobs: int = 1) -> ChangeStudy:
    """Price two networks and say what moved; legs and itineraries are matched by name.

    Raises
    ------
    SettingError
        If the currencies differ, or the method is the randomised program, whose draws would differ.
    SolveError
        If either has no certified optimum.
    """
    if options.method is Method.RANDOMISED:
        raise SettingError("a change needs one program; choose --method probabilistic or deterministic")
    if before.currency != after.currency:
        raise SettingError(f"the folders are in {before.currency} and {after.currency}; give both in one currency")
    old = solve_network(before, options, jobs=jobs)
    kept, place = matched_names(before.legs.name, after.legs.name)
    start = np.zeros(after.n_legs)
    start[place] = old.bid_price[kept]
    new = solve_network(after, options, start=start, jobs=jobs)
    lost = np.setdiff1d(np.arange(before.n_itineraries), matched_names(before.itinerary, after.itinerary)[0])
    return ChangeStudy(
        account=account_of_change(before, after),
        before=old.objective,
        after=new.objective,
        moves=_moves(before, old, new, kept, place),
        lost_itineraries=len(lost),
        freed=_freed(before, old, lost, kept),
    )


def _moves(
    before: Network, old: NetworkSolution, new: NetworkSolution, kept: IntArray, place: IntArray
) -> tuple[LegMove, ...]:
    change = np.abs(new.bid_price[place] - old.bid_price[kept])
    greatest = np.argsort(-change, kind="stable")[:MOST_MOVED]
    return tuple(
        LegMove(
            leg=str(before.legs.name[kept[n]]),
            price_before=float(old.bid_price[kept[n]]),
            price_after=float(new.bid_price[place[n]]),
            sales_before=float(old.expected_sales[kept[n]]),
            sales_after=float(new.expected_sales[place[n]]),
        )
        for n in greatest.tolist()
        if change[n] > 1e-9 * max(float(np.abs(old.bid_price).max(initial=0.0)), 1.0)
    )


def _freed(before: Network, old: NetworkSolution, lost: IntArray, kept: IntArray) -> tuple[tuple[str, float], ...]:
    """Expected passengers of lost itineraries on the legs that remain."""
    sales = np.where(np.isin(before.product_itinerary, lost), old.sales, 0.0)
    load: FloatArray = before.leg_load(sales)
    shown = [leg for leg in np.argsort(-load, kind="stable")[:MOST_MOVED].tolist() if load[leg] > 0 and leg in kept]
    return tuple((str(before.legs.name[leg]), float(load[leg])) for leg in shown)
