"""Tables of the report on departures, revenue and the run."""

from __future__ import annotations

from collections.abc import Iterable

from legworth.refresh.changes import Changes, Departure
from legworth.refresh.changes_tables import Head, PageTable, shown_of
from legworth.refresh.changes_words import duration, signed
from legworth.report import money, price_text
from legworth.store import Check
from legworth.store.check_words import check_title, figure_text, outcome_word

__all__ = ["check_table", "departure_tables", "revenue_table", "seconds_table"]


def departure_tables(changes: Changes) -> list[PageTable]:
    """Departures gone, added, retimed and resized."""
    found, currency = changes.departures, changes.tonight.currency
    if found is None:
        return []
    tables = []
    names = (Head("Leg", word=True), Head("Route", word=True), Head("Departs, local", word=True))
    heads: tuple[Head, ...]
    rows: list[tuple[str, ...]]
    if found.gone:
        caption = f"Missing before their time, {shown_of(len(found.gone), found.gone_count)}, most seats sold first"
        heads = (*names, Head("Seats sold"), Head("Capacity, seats"), Head(f"Last bid price, {currency} a seat"))
        rows = [
            (*_names(line), f"{line.sold:,}", f"{line.capacity:,}", price_text(line.bid_price)) for line in found.gone
        ]
        tables.append(PageTable("missing", caption, heads, tuple(rows)))
    if found.retimed:
        caption = f"With another time, {shown_of(len(found.retimed), found.retimed_count)}, most seats sold first"
        heads = (*names, Head("Last night, local", word=True), Head("Seats sold"))
        rows = [(*_names(line), line.departs_then, f"{line.sold:,}") for line in found.retimed]
        tables.append(PageTable("retimed", caption, heads, tuple(rows)))
    if found.resized:
        caption = f"With other seats, {shown_of(len(found.resized), found.resized_count)}, most seats sold first"
        heads = (*names, Head("Capacity, seats"), Head("Last night, seats"), Head("Seats sold"))
        rows = [
            (*_names(line), f"{line.capacity:,}", f"{line.capacity_then:,}", f"{line.sold:,}") for line in found.resized
        ]
        tables.append(PageTable("resized", caption, heads, tuple(rows)))
    if found.added_dates:
        heads = (
            Head("Date", word=True),
            Head("Departures"),
            Head("Seats for sale"),
            Head(f"Bid price times seats, {currency}"),
        )
        rows = [(day.date, f"{day.legs:,}", f"{day.seats:,}", money(day.worth)) for day in found.added_dates]
        tables.append(PageTable("added", "Departures added, by date", heads, tuple(rows)))
    return tables


def _names(line: Departure) -> tuple[str, str, str]:
    return line.leg, line.route, line.departs


def revenue_table(changes: Changes) -> PageTable | None:
    """Parts whose revenue to come moved most."""
    found, currency = changes.revenue, changes.tonight.currency
    if not found.most:
        return None
    heads = (
        Head("Part", word=True),
        Head("Departures"),
        Head(f"Tonight, {currency}"),
        Head(f"Last night, {currency}"),
        Head(f"Change, {currency}"),
        Head("Seats sold since"),
        Head(f"These at last night's prices, {currency}"),
    )
    rows = [
        (
            *(line.part, f"{line.departures:,}", money(line.now), money(line.then), signed(line.change, 0)),
            *(f"{line.seats_sold:,}", money(line.sold_worth)),
        )
        for line in found.most
    ]
    return PageTable("revenue-parts", "Parts whose revenue to come moved most, most first", heads, tuple(rows))


def check_table(checks: Iterable[Check]) -> PageTable | None:
    """Checks of the run with their limits."""
    rows = []
    for check in checks:
        look = "; ".join(check.look_at[:3]) if not check.passed else ""
        figures = (figure_text(check, value) for value in (check.found, check.limit))
        rows.append((check_title(check), *figures, outcome_word(check), look))
    heads = (
        Head("Check", word=True),
        Head("Found"),
        Head("Limit"),
        Head("Outcome", word=True),
        Head("Look first at", word=True),
    )
    return PageTable("checks", "Checks against last night, and their limits", heads, tuple(rows)) if rows else None


def seconds_table(changes: Changes) -> list[PageTable]:
    """Where the time went."""
    run = changes.run
    if run is None:
        return []
    phases = [(name.replace("_", " "), duration(spent)) for name, spent in run.seconds.items()]
    parts = [(name.replace("_", " "), duration(spent)) for name, spent in run.part_seconds.items()]
    slow = [(line.part, f"{line.products:,}", duration(line.seconds)) for line in run.slowest]
    sizes = [(name.replace("_", " "), f"{count:,}") for name, count in run.rows.items()]
    phase = (Head("Phase", word=True), Head("Time"))
    tables = [
        PageTable("phases", "Time by phase of the run", phase, tuple(phases)),
        PageTable("part-phases", "Time by phase of the parts, added up over them", phase, tuple(parts)),
        PageTable(
            "slowest",
            "Parts solved that took longest",
            (Head("Part", word=True), Head("Products"), Head("Time")),
            tuple(slow),
        ),
        PageTable("rows", "Rows by table", (Head("Table", word=True), Head("Rows")), tuple(sizes)),
    ]
    return [table for table in tables if table.rows]
