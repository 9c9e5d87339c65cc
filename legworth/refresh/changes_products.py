"""What became of the products: closed and opened ones, and those that the two controls dispute."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

from legworth.refresh.changes_join import ProductBase

__all__ = ["Dispute", "Flip", "FlipTotals", "ProductChanges", "StakeTotals", "product_changes"]

MOVED = """
(SELECT *,
    CASE WHEN disagreement IS NULL THEN 'gone' WHEN disagreement_then IS NULL THEN 'new' ELSE 'turned' END AS status,
    CASE WHEN disagreement IS NULL THEN at_stake_then ELSE at_stake END AS money
FROM moved WHERE disagreement IS DISTINCT FROM disagreement_then)"""


@dataclass(frozen=True)
class Flip:
    """A product on sale both nights that network control closed or opened since last night.

    Attributes
    ----------
    itinerary, fare_class, legs
        The product, and the legs of its path in travel order.
    opened
        True if it was closed and is open.
    fare, fare_then, displacement, displacement_then, contribution, contribution_then
        As in ``connections``, tonight and last night, currency per passenger.
    seats, seats_then
        Seats left on its path, tonight and last night.
    passengers
        Passengers expected, by mean demand to come, at most the seats of the night on which it was open.
    worth
        Size of tonight's contribution times these passengers, currency: to first order, what it would cost to go on
        as last night.
    """

    itinerary: str
    fare_class: str
    legs: str
    opened: bool
    fare: float
    fare_then: float
    displacement: float
    displacement_then: float
    contribution: float
    contribution_then: float
    seats: int
    seats_then: int
    passengers: float
    worth: float


@dataclass(frozen=True)
class FlipTotals:
    """Products that went one way: how many, passengers expected, what these pay together, and the worth of it."""

    products: int
    passengers: float
    fares: float
    worth: float


@dataclass(frozen=True)
class Dispute:
    """A product that exactly one of network and leg-level control sells, tonight or last night.

    Attributes
    ----------
    itinerary, fare_class, legs
        The product, and the legs of its path in travel order.
    fare
        Currency per passenger.
    disagreement, disagreement_then
        ``network_only``, ``leg_only`` or empty, tonight and last night.
    at_stake, at_stake_then
        Money that hangs on it, as in ``connections``, currency.
    status
        ``new``, ``stands``, ``turned`` (now the other control sells it), ``gone``, ``new product``; empty on the first
        night.
    """

    itinerary: str
    fare_class: str
    legs: str
    fare: float
    disagreement: str
    disagreement_then: str
    at_stake: float
    at_stake_then: float
    status: str


@dataclass(frozen=True)
class StakeTotals:
    """Disagreements of a night: products, and money at stake, by the control that alone sells them."""

    network_only: int
    leg_only: int
    network_only_at_stake: float
    leg_only_at_stake: float

    @property
    def products(self) -> int:
        """Products in disagreement."""
        return self.network_only + self.leg_only

    @property
    def at_stake(self) -> float:
        """Money at stake in all, currency; rows may count the same seat."""
        return self.network_only_at_stake + self.leg_only_at_stake


@dataclass(frozen=True)
class ProductChanges:
    """What became of the products.

    Attributes
    ----------
    parts_compared
        Parts of tonight that were compared product by product; in the others nothing can differ.
    fares_changed
        Products on sale both nights with another fare.
    added, dropped
        Products that only tonight has, and that only last night had.
    closed, opened
        The flips worth most.
    closed_totals, opened_totals
        All of them together.
    disputes, new_disputes, gone_disputes
        Disagreements with most at stake tonight, the new ones among products on sale both nights, and those gone.
    new_totals, gone_totals
        How many new and gone ones there are, and their money, currency.
    tonight, last
        All disagreements of both nights; None for last night on the first.
    """

    parts_compared: int
    fares_changed: int
    added: int
    dropped: int
    closed: tuple[Flip, ...]
    opened: tuple[Flip, ...]
    closed_totals: FlipTotals
    opened_totals: FlipTotals
    disputes: tuple[Dispute, ...]
    new_disputes: tuple[Dispute, ...]
    gone_disputes: tuple[Dispute, ...]
    new_totals: tuple[int, float]
    gone_totals: tuple[int, float]
    tonight: StakeTotals
    last: StakeTotals | None


def product_changes(joined: ProductBase, top: int) -> ProductChanges:
    """Draw the largest changes, at most ``top`` of each kind, and the totals from joined products."""
    tonight, last = _stake_totals(joined)
    return ProductChanges(
        parts_compared=len(joined.changed),
        fares_changed=joined.fares_changed,
        added=int(joined.row("SELECT count(*) FROM only_tonight")[0]),
        dropped=int(joined.row("SELECT count(*) FROM only_last")[0]),
        closed=_flips(joined, top, "NOT open"),
        opened=_flips(joined, top, "open"),
        closed_totals=_flip_totals(joined, "NOT open"),
        opened_totals=_flip_totals(joined, "open"),
        disputes=_disputes(joined, top),
        new_disputes=_moved_disputes(joined, top, "new"),
        gone_disputes=_moved_disputes(joined, top, "gone"),
        new_totals=_moved_totals(joined, "new"),
        gone_totals=_moved_totals(joined, "gone"),
        tonight=tonight,
        last=last,
    )


def _flips(joined: ProductBase, top: int, which: str) -> tuple[Flip, ...]:
    rows = joined.rows(
        f"""SELECT itinerary, fare_class, legs, open, fare, fare_then, displacement, displacement_then, contribution,
        contribution_then, seats, seats_then, passengers, passengers * abs(contribution) AS worth
        FROM moved WHERE open <> open_then AND {which}
        ORDER BY worth DESC, passengers DESC, itinerary, fare_class LIMIT {top}"""
    )
    return tuple(Flip(*row) for row in rows)


def _flip_totals(joined: ProductBase, which: str) -> FlipTotals:
    return FlipTotals(
        *joined.row(
            f"""SELECT count(*), {_total("passengers")}, {_total("passengers * fare")},
            {_total("passengers * abs(contribution)")} FROM moved WHERE open <> open_then AND {which}"""
        )
    )


def _moved_disputes(joined: ProductBase, top: int, status: str) -> tuple[Dispute, ...]:
    rows = joined.rows(
        f"""SELECT itinerary, fare_class, legs, fare, coalesce(disagreement, ''), coalesce(disagreement_then, ''),
        at_stake, at_stake_then, status FROM {MOVED} WHERE status = '{status}'
        ORDER BY money DESC, itinerary, fare_class LIMIT {top}"""
    )
    return tuple(Dispute(*row) for row in rows)


def _moved_totals(joined: ProductBase, status: str) -> tuple[int, float]:
    count, money = joined.row(f"SELECT count(*), {_total('money')} FROM {MOVED} WHERE status = '{status}'")
    return int(count), float(money)


def _stake_totals(joined: ProductBase) -> tuple[StakeTotals, StakeTotals | None]:
    """Disagreements of both nights; parts that did not change are read once for both."""
    tonight, last = joined.tonight, joined.last
    changed = joined.changed if last is not None else tonight.parts()
    shared = [part for part in tonight.parts() if part not in set(changed)]
    common = _stakes(joined, joined.files(tonight, "connections", shared))
    now = _sum(common, _stakes(joined, joined.files(tonight, "connections", changed)))
    if last is None:
        return now, None
    return now, _sum(common, _stakes(joined, joined.files(last, "connections", joined.changed_last)))


def _stakes(joined: ProductBase, rows: str) -> StakeTotals:
    kinds = ("network_only", "leg_only")
    counts = [f"count(*) FILTER (disagreement = '{kind}')" for kind in kinds]
    sums = [_total("at_stake", f"FILTER (disagreement = '{kind}')") for kind in kinds]
    return StakeTotals(*joined.row(f"SELECT {', '.join(counts + sums)} FROM {rows}"))


def _total(amount: str, which: str = "") -> str:
    """SQL of a sum to a millionth, which is exact, so that threads give the same whatever their order."""
    return f"coalesce(sum(({amount})::DECIMAL(28, 6)) {which}, 0)::DOUBLE"


def _sum(one: StakeTotals, other: StakeTotals) -> StakeTotals:
    return StakeTotals(
        one.network_only + other.network_only,
        one.leg_only + other.leg_only,
        one.network_only_at_stake + other.network_only_at_stake,
        one.leg_only_at_stake + other.leg_only_at_stake,
    )


def _disputes(joined: ProductBase, top: int) -> tuple[Dispute, ...]:
    """Find the disagreements with most at stake over all parts of tonight, and what they were last night."""
    tonight, last, base = joined.tonight, joined.last, joined.base
    base.execute(
        f"""CREATE TEMP TABLE largest AS SELECT part, itinerary, fare_class, fare, disagreement, at_stake
        FROM {joined.files(tonight, "connections", tonight.parts())} WHERE disagreement IS NOT NULL
        ORDER BY at_stake DESC, itinerary, fare_class LIMIT {top}"""
    )
    base.execute(
        "CREATE TEMP TABLE earlier (itinerary VARCHAR, fare_class VARCHAR, disagreement VARCHAR, at_stake DOUBLE)"
    )
    parts = [str(row[0]) for row in joined.rows("SELECT DISTINCT part FROM largest ORDER BY part")]
    if not parts:
        return ()
    if last is not None:
        _find_earlier(joined, [part for part in parts if part in set(last.parts())])
        known = "(SELECT itinerary, fare_class FROM earlier UNION ALL SELECT itinerary, fare_class FROM only_tonight)"
        if joined.row(f"SELECT count(*) FROM largest ANTI JOIN {known} USING (itinerary, fare_class)")[0]:
            _find_earlier(joined, [part for part in joined.changed_last if part not in set(parts)])
    rows: list[tuple[Any, ...]] = joined.rows(
        f"""SELECT t.itinerary, t.fare_class, i.legs, t.fare, t.disagreement, coalesce(e.disagreement, ''), t.at_stake,
        coalesce(e.at_stake, 0.0),
        CASE WHEN {"false" if last is not None else "true"} THEN '' WHEN e.itinerary IS NULL THEN 'new product'
            WHEN e.disagreement IS NULL THEN 'new' WHEN e.disagreement = t.disagreement THEN 'stands' ELSE 'turned' END
        FROM largest t JOIN {joined.files(tonight, "itineraries", parts)} i USING (part, itinerary)
        LEFT JOIN earlier e ON t.itinerary = e.itinerary AND t.fare_class = e.fare_class
        ORDER BY t.at_stake DESC, t.itinerary, t.fare_class"""
    )
    return tuple(Dispute(*row) for row in rows)


def _find_earlier(joined: ProductBase, parts: list[str]) -> None:
    """Look the largest disagreements up in some parts of last night."""
    assert joined.last is not None
    joined.base.execute(
        f"""INSERT INTO earlier SELECT l.itinerary, l.fare_class, l.disagreement, l.at_stake
        FROM {joined.files(joined.last, "connections", parts)} l SEMI JOIN largest USING (itinerary, fare_class)"""
    )
