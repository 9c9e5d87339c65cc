"""What moved since last night, and why: the report that a planner reads in the morning."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, fields, is_dataclass, replace
from datetime import datetime
from typing import Any

from pydantic import BaseModel

from legworth.refresh.changes_join import joined_products
from legworth.refresh.changes_legs import (
    AddedDate,
    DepartureChanges,
    LegMatch,
    NightLegs,
    departure_changes,
    match_legs,
)
from legworth.refresh.changes_nights import NightFacts, NightTables
from legworth.refresh.changes_prices import ExplainOptions, PriceChanges, price_changes
from legworth.refresh.changes_products import ProductChanges, product_changes
from legworth.refresh.changes_revenue import RevenueChanges, revenue_changes
from legworth.refresh.changes_run import RunHealth
from legworth.store import Manifest
from lp import LpOptions, Method, SolverOptions
from network import SettingError

__all__ = ["Changes", "ChangesOptions", "Departure", "Departures", "find_changes"]


@dataclass(frozen=True)
class ChangesOptions:
    """How the report is made.

    Attributes
    ----------
    top
        Longest list.
    explain
        How much work may go into the causes of price moves.
    memory, threads
        What the comparison of products may take: memory such as ``1GB``, and threads.
    """

    top: int = 20
    explain: ExplainOptions = field(default_factory=ExplainOptions)
    memory: str = "1GB"
    threads: int = 2

    def __post_init__(self) -> None:
        if self.top < 1 or self.threads < 1:
            raise SettingError("a report of changes needs lists of at least 1 row and at least 1 thread")


@dataclass(frozen=True)
class Departure:
    """A departure that went, or changed its time or size.

    Attributes
    ----------
    leg, route, departs, departs_then
        The leg, its stations, its local departure, and that of last night.
    capacity, capacity_then, sold
        Seats; of one that is gone those of last night.
    bid_price
        Last price known, currency per seat.
    """

    leg: str
    route: str
    departs: str
    departs_then: str
    capacity: int
    capacity_then: int
    sold: int
    bid_price: float


@dataclass(frozen=True)
class Departures:
    """What became of departures.

    Attributes
    ----------
    on_sale
        Departures on sale tonight.
    added, added_dates
        Departures added, and the same by date, earliest first.
    gone, gone_count, gone_sold
        Departures missing before their time, those with most seats sold first; how many, and the seats sold on them.
    departed, departed_seats, departed_empty
        Departures that left since last night, their capacity, and the seats that last night still had for sale.
    retimed, retimed_count, resized, resized_count
        Departures with another time or capacity, those with most seats sold first, and how many there are.
    """

    on_sale: int
    added: int
    added_dates: tuple[AddedDate, ...]
    gone: tuple[Departure, ...]
    gone_count: int
    gone_sold: int
    departed: int
    departed_seats: int
    departed_empty: int
    retimed: tuple[Departure, ...]
    retimed_count: int
    resized: tuple[Departure, ...]
    resized_count: int


@dataclass(frozen=True)
class Changes:
    """What moved since last night.

    Attributes
    ----------
    tonight, last
        The nights; None for last night if there was none to compare with.
    note
        Why an earlier night was not compared with, or what makes the comparison doubtful; empty as a rule.
    run
        Health of the run; None if no manifest was given.
    prices, departures
        Price moves and departures; None without last night.
    products, revenue
        Products and revenue to come.
    """

    tonight: NightFacts
    last: NightFacts | None
    note: str
    run: RunHealth | None
    prices: PriceChanges | None
    departures: Departures | None
    products: ProductChanges
    revenue: RevenueChanges

    def as_dict(self) -> dict[str, Any]:
        """Everything as plain values, for JSON; amounts in the currency of the network."""
        plain = _plain(self)
        assert isinstance(plain, dict)
        return plain


def find_changes(
    tonight: NightTables,
    last: NightTables | None,
    manifest: Manifest | None = None,
    options: ChangesOptions | None = None,
) -> Changes:
    """Compare tonight with last night.

    Parameters
    ----------
    tonight
        The night to report on, published or about to be.
    last
        The night to compare with; None on the first.
    manifest
        Manifest of tonight, if the night does not carry it yet: the health of the run and the revenue by part.
    options
        How.

    Raises
    ------
    InputError, StoreError
        If a night cannot be read.
    """
    options = options or ChangesOptions()
    manifest = manifest or getattr(tonight, "manifest", None)
    earlier: Manifest | None = getattr(last, "manifest", None)
    facts, facts_last = NightFacts.of(tonight), NightFacts.of(last) if last is not None else None
    note = _note(facts, facts_last, manifest, earlier)
    if facts_last is not None and facts_last.currency != facts.currency:
        last, facts_last, earlier = None, None, None
    legs = NightLegs.of(tonight, facts.as_of)
    legs_last = NightLegs.of(last, facts_last.as_of) if last is not None and facts_last is not None else None
    prices, departures, match = None, None, None
    if last is not None and legs_last is not None:
        match = match_legs(legs, legs_last)
        how = replace(options.explain, lp=options.explain.lp or _program(manifest))
        prices = price_changes((tonight, last), (legs, legs_last), match, options.top, how)
        found = departure_changes(legs, legs_last, match, facts.as_of)
        departures = _departures(legs, legs_last, match, found, options.top)
    with joined_products(tonight, last, legs, legs_last, memory=options.memory, threads=options.threads) as joined:
        products = product_changes(joined, options.top)
    both = (legs, legs_last) if legs_last is not None else None
    revenue = revenue_changes(_revenue(manifest), _revenue(earlier), both, match, options.top)
    run = RunHealth.of(manifest) if manifest is not None else None
    return Changes(facts, facts_last, note, run, prices, departures, products, revenue)


def _program(manifest: Manifest | None) -> LpOptions:
    """Return the program that a night was priced with, as far as its manifest says."""
    said = {} if manifest is None else {name: value for name, value in manifest.settings.items() if value is not None}
    usual = LpOptions()
    return LpOptions(
        method=Method(said.get("method", usual.method)),
        solver=SolverOptions(said.get("solver", usual.solver.name)),
        tail=float(said.get("tail", usual.tail)),
        samples=int(said.get("samples", usual.samples)),
        seed=int(said.get("seed", usual.seed)),
    )


def _note(facts: NightFacts, last: NightFacts | None, manifest: Manifest | None, earlier: Manifest | None) -> str:
    if last is None:
        return ""
    if last.currency != facts.currency:
        return (
            f"Last night, {last.night}, was in {last.currency} and tonight is in {facts.currency}: nothing is compared."
        )
    if last.as_of > facts.as_of:
        return (
            f"The snapshot of last night, {last.as_of:%Y-%m-%d %H:%M %z}, is later than tonight's: "
            "the comparison runs backwards in time."
        )
    if manifest is not None and earlier is not None:
        names = sorted({*manifest.settings, *earlier.settings})
        differ = [name for name in names if manifest.settings.get(name) != earlier.settings.get(name)]
        if differ:
            return f"Settings differ from last night's ({', '.join(differ)}), so that prices may differ for that alone."
    return ""


def _revenue(manifest: Manifest | None) -> dict[str, float | None]:
    return {part.name: part.objective for part in manifest.parts} if manifest is not None else {}


def _departures(legs: NightLegs, last: NightLegs, match: LegMatch, found: DepartureChanges, top: int) -> Departures:
    def changed(positions: Any) -> tuple[Departure, ...]:
        order = positions[(-legs.sold[match.now[positions]]).argsort(kind="stable")][:top]
        return tuple(_departure(legs, match.now[m], last, match.then[m]) for m in order)

    gone = found.gone[(-last.sold[found.gone]).argsort(kind="stable")]
    return Departures(
        on_sale=int((~legs.departed).sum()),
        added=len(found.added),
        added_dates=tuple(found.added_by_date(legs)),
        gone=tuple(_departure(last, leg, last, leg) for leg in gone[:top]),
        gone_count=len(gone),
        gone_sold=int(last.sold[gone].sum()),
        departed=len(found.departed),
        departed_seats=int(last.capacity[found.departed].sum()),
        departed_empty=int(last.remaining[found.departed].sum()),
        retimed=changed(found.retimed),
        retimed_count=len(found.retimed),
        resized=changed(found.resized),
        resized_count=len(found.resized),
    )


def _departure(legs: NightLegs, leg: int, last: NightLegs, then: int) -> Departure:
    return Departure(
        leg=str(legs.name[leg]),
        route=str(legs.route[leg]),
        departs=str(legs.local[leg]),
        departs_then=str(last.local[then]),
        capacity=int(legs.capacity[leg]),
        capacity_then=int(last.capacity[then]),
        sold=int(legs.sold[leg]),
        bid_price=float(legs.bid_price[leg]),
    )


def _plain(value: Any) -> Any:
    """Turn records into dicts, in the order of their fields."""
    if is_dataclass(value) and not isinstance(value, type):
        return {f.name: _plain(getattr(value, f.name)) for f in fields(value)}
    if isinstance(value, BaseModel):
        return value.model_dump(mode="json")
    if isinstance(value, datetime):
        return value.isoformat()
    if isinstance(value, Mapping):
        return {str(key): _plain(entry) for key, entry in value.items()}
    if isinstance(value, (tuple, list)):
        return [_plain(entry) for entry in value]
    return value
