"""Checks of a night before it goes into force: is what came out plausible beside last night?

Each has a limit in section ``[refresh]`` of ``network.toml``, may stop the night, and names the worst offenders first.
All work on one row a leg. What passes is at or below its limit.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from datetime import UTC, datetime
from typing import Protocol

import numpy as np
import pandas as pd
import pyarrow as pa

from legworth.store import Check
from legworth.store.check_words import CERTIFICATES, TITLES, check_line
from network.arrays import BoolArray, FloatArray
from network.refresh_settings import RefreshSettings

__all__ = ["CERTIFICATES", "TITLES", "NightLegs", "check_line", "check_night"]

LISTED = 10
"""Offenders named by a check."""

ROUNDING = 1e-6
"""Share by which a bid price must exceed the highest fare to count as above it."""


class LegTables(Protocol):
    """A night, finished or not."""

    def table(self, name: str, columns: Sequence[str] | None = None, parts: Sequence[str] | None = None) -> pa.Table:
        """One table of all parts put together."""


@dataclass(frozen=True, eq=False)
class NightLegs:
    """One row a leg of a night, and the instant of its snapshot.

    The columns of ``frame`` are ``departs`` (UTC), ``capacity``, ``remaining``, ``demand``, ``highest_fare`` and
    ``bid_price``; its index is the name of the leg.
    """

    frame: pd.DataFrame
    as_of: datetime

    @classmethod
    def of(cls, night: LegTables, as_of: datetime) -> NightLegs:
        """Read the legs of a night."""
        columns = ["departs", "capacity", "remaining", "demand", "highest_fare"]
        totals = night.table("leg_totals", ["leg", *columns]).drop_columns("part").to_pandas().set_index("leg")
        prices = night.table("bid_prices", ["leg", "bid_price"]).drop_columns("part").to_pandas()
        price = prices.astype({"leg": "str"}).set_index("leg")["bid_price"]
        totals.index = totals.index.astype("str")
        return cls(totals.assign(bid_price=price.reindex(totals.index)), as_of)

    def on_sale(self, at: datetime) -> pd.DataFrame:
        """Legs that have not departed by an instant."""
        return self.frame[self.frame["departs"] > pd.Timestamp(at.astimezone(UTC))]


def check_night(
    tonight: NightLegs, last: NightLegs | None, limits: RefreshSettings, failed: Sequence[str]
) -> list[Check]:
    """Make all checks of a night.

    Parameters
    ----------
    tonight, last
        Legs of both nights; None if there is no last night, and then what compares with it passes unmade.
    limits
        The limits.
    failed
        Names of parts without a certified optimum.
    """
    now = tonight.on_sale(tonight.as_of)
    checks = [
        Check(name=CERTIFICATES, limit=0, found=len(failed), passed=not failed, look_at=tuple(failed[:LISTED])),
        _no_demand(now, limits),
        _above_fare(now, limits),
        _zero(now, limits),
    ]
    if last is None:
        compared = ("snapshot", "demand_total", "demand_legs", "capacity_total", "capacity_legs", "prices", "missing")
        return _in_order(checks + [Check(name=name, limit=None, found=None, passed=True) for name in compared])
    then = last.on_sale(tonight.as_of)
    both = now.join(then.add_suffix("_then"), how="inner")
    checks += [
        _snapshot(tonight.as_of, last.as_of, limits),
        _total("demand_total", both, "demand", limits.demand_total),
        _demand_legs(both, limits),
        _total("capacity_total", both, "capacity", limits.capacity_total),
        _capacity_legs(both, limits),
        _prices(both, limits),
        _missing(tonight.frame, then, limits),
    ]
    return _in_order(checks)


def _in_order(checks: list[Check]) -> list[Check]:
    order = list(TITLES)
    return sorted(checks, key=lambda check: order.index(check.name))


def _legs_check(
    name: str,
    legs: pd.DataFrame,
    bad: BoolArray,
    worst: FloatArray,
    share: float,
    few: int,
    say: Callable[[pd.Series], str],
) -> Check:
    """Check the share of legs that are at fault; ``few`` of them always pass."""
    count, total = int(bad.sum()), max(len(legs), 1)
    limit = max(share, min(few / total, 1.0))
    places = np.flatnonzero(bad)
    first = places[np.lexsort((legs.index.to_numpy()[places].astype("str"), -worst[places]))][:LISTED]
    look_at = tuple(f"{legs.index[place]}: {say(legs.iloc[place])}" for place in first.tolist())
    return Check(name=name, limit=limit, found=count / total, passed=count / total <= limit, look_at=look_at)


def _figures(legs: pd.DataFrame, name: str) -> FloatArray:
    return legs[name].to_numpy(dtype=np.float64)


def _no_demand(now: pd.DataFrame, limits: RefreshSettings) -> Check:
    bad = _figures(now, "demand") <= 0
    return _legs_check(
        "no_demand",
        now,
        bad,
        _figures(now, "remaining"),
        limits.no_demand_share,
        limits.few_legs,
        lambda leg: f"{leg['remaining']:.0f} seats left and no demand",
    )


def _above_fare(now: pd.DataFrame, limits: RefreshSettings) -> Check:
    price, highest = _figures(now, "bid_price"), _figures(now, "highest_fare")
    return _legs_check(
        "above_fare",
        now,
        price > highest * (1 + ROUNDING) + 1e-9,
        price - highest,
        limits.above_fare_share,
        0,
        lambda leg: f"bid price {leg['bid_price']:,.2f}, highest fare {leg['highest_fare']:,.2f}",
    )


def _zero(now: pd.DataFrame, limits: RefreshSettings) -> Check:
    seats = now[now["remaining"] > 0]
    return _legs_check(
        "zero",
        seats,
        _figures(seats, "bid_price") <= 0,
        _figures(seats, "demand"),
        limits.zero_share,
        limits.few_legs,
        lambda leg: f"demand of {leg['demand']:.1f} for {leg['remaining']:.0f} seats left",
    )


def _snapshot(now: datetime, then: datetime, limits: RefreshSettings) -> Check:
    older = max((then - now).total_seconds() / 3600, 0.0)
    look_at = (f"as_of is {now.isoformat()}, last night's was {then.isoformat()}",) if older > 0 else ()
    return Check(
        name="snapshot",
        limit=limits.older_hours,
        found=older,
        passed=older <= limits.older_hours,
        look_at=look_at,
    )


def _total(name: str, both: pd.DataFrame, column: str, limit: float) -> Check:
    """Check how far a sum over the legs of both nights has moved; names the legs that moved it most."""
    now, then = _figures(both, column), _figures(both, f"{column}_then")
    before = float(then.sum())
    moved = float(now.sum()) - before
    share = abs(moved) / before if before > 0 else float(moved != 0)
    part = (now - then) * np.sign(moved)
    first = np.lexsort((both.index.to_numpy().astype("str"), -part))[:LISTED]
    look_at = tuple(f"{both.index[n]}: {then[n]:.1f} -> {now[n]:.1f}" for n in first.tolist() if part[n] > 0)
    return Check(name=name, limit=limit, found=share, passed=share <= limit, look_at=look_at)


def _demand_legs(both: pd.DataFrame, limits: RefreshSettings) -> Check:
    now, then = _figures(both, "demand"), _figures(both, "demand_then")
    move = np.abs(now - then)
    return _legs_check(
        "demand_legs",
        both,
        _beyond(now, then, limits.demand_factor) & (move >= limits.demand_least),
        move,
        limits.demand_share,
        limits.few_legs,
        lambda leg: f"demand to come {leg['demand_then']:.1f} -> {leg['demand']:.1f}",
    )


def _capacity_legs(both: pd.DataFrame, limits: RefreshSettings) -> Check:
    now, then = _figures(both, "capacity"), _figures(both, "capacity_then")
    return _legs_check(
        "capacity_legs",
        both,
        _beyond(now, then, limits.capacity_factor),
        np.abs(now - then),
        limits.capacity_share,
        limits.few_legs,
        lambda leg: f"seats {leg['capacity_then']:.0f} -> {leg['capacity']:.0f}",
    )


def _prices(both: pd.DataFrame, limits: RefreshSettings) -> Check:
    now, then = _figures(both, "bid_price"), _figures(both, "bid_price_then")
    highest = np.maximum(_figures(both, "highest_fare"), _figures(both, "highest_fare_then"))
    move = np.abs(now - then)
    return _legs_check(
        "prices",
        both,
        _beyond(now, then, limits.price_factor) & (move >= limits.price_least * highest) & (move > 0),
        move,
        limits.price_share,
        limits.few_legs,
        lambda leg: f"bid price {leg['bid_price_then']:,.2f} -> {leg['bid_price']:,.2f}",
    )


def _missing(tonight: pd.DataFrame, then: pd.DataFrame, limits: RefreshSettings) -> Check:
    sold = _figures(then, "capacity") - _figures(then, "remaining")
    return _legs_check(
        "missing",
        then,
        ~then.index.isin(tonight.index),
        sold,
        limits.missing_share,
        limits.few_legs,
        lambda leg: (
            f"departs {leg['departs']:%Y-%m-%d %H:%M} UTC, {leg['capacity'] - leg['remaining']:.0f} seats taken"
        ),
    )


def _beyond(now: FloatArray, then: FloatArray, factor: float) -> BoolArray:
    """Where a figure has moved beyond a factor, up or down; from or to nothing always counts."""
    return np.asarray((now > factor * then) | (then > factor * now))
