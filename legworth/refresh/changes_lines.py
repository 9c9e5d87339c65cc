"""The five lines at the top of the report that say what matters."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass

from legworth.refresh.changes import Changes
from legworth.refresh.changes_words import cause_sentence, count_of, duration, shown_move, signed
from legworth.report import money, price_text
from legworth.store.check_words import check_line

__all__ = ["Line", "first_lines"]

REPORT = "changes"
"""Phase of the run that writes this report."""


@dataclass(frozen=True)
class Line:
    """One of the first lines of the report; ``alert`` if a person has to look before anything else."""

    topic: str
    text: str
    alert: bool = False


def first_lines(changes: Changes) -> list[Line]:
    """Five lines that say what matters, those that need a person first."""
    lines = [_run(changes), _departures(changes), _revenue(changes), _prices(changes), _products(changes)]
    return sorted(lines, key=lambda line: not line.alert)


def _run(changes: Changes) -> Line:
    run = changes.run
    if run is None:
        return Line("Run", "How the run went is not known here; see its manifest.")
    if run.not_certified:
        names = _some(run.not_certified)
        return Line("Run", f"{count_of(len(run.not_certified), 'part')} without a certificate: {names}.", alert=True)
    failed = ". ".join(check_line(check) for check in run.failed)
    if run.forced is not None:
        said = f"Reason given: {run.forced.reason}."
        what = f"in spite of {count_of(len(run.failed), 'failed check')}" if failed else "by force"
        return Line("Run", f"Published by {run.forced.who} {what}. {said} {failed}".strip(), alert=True)
    if failed:
        return Line("Run", f"{count_of(len(run.failed), 'check')} failed. {failed}.", alert=True)
    checks = f"{count_of(len(run.checks), 'check')} held" if run.checks else "no checks were made"
    note = f" {changes.note}" if changes.note else ""
    before = [spent for phase, spent in run.seconds.items() if phase != REPORT]
    time = f", in {duration(sum(before))} before this report was begun" if before else ""
    return Line(
        "Run",
        f"All {count_of(run.parts, 'part')} are certified and {checks}; {run.solved:,} solved, "
        f"{run.taken_over:,} taken over unchanged{time}.{note}",
        alert=bool(changes.note),
    )


def _departures(changes: Changes) -> Line:
    found = changes.departures
    if found is None:
        return Line("Departures", "This is the first night: there is no earlier one to compare with.")
    rest = f"{found.added:,} added, {found.departed:,} departed, {found.on_sale:,} on sale"
    changed = [
        f"{count:,} {word}"
        for count, word in ((found.retimed_count, "with another time"), (found.resized_count, "with other seats"))
        if count
    ]
    rest = ", ".join([rest, *changed])
    if not found.gone_count:
        return Line("Departures", f"None is missing before its time; {rest}.")
    names = _some((line.leg for line in found.gone), found.gone_count)
    gone, sold = count_of(found.gone_count, "departure"), count_of(found.gone_sold, "seat")
    verb = "is" if found.gone_count == 1 else "are"
    return Line(
        "Departures",
        f"{gone} {verb} missing before time, with {sold} sold: {names}. {rest}.",
        alert=True,
    )


def _revenue(changes: Changes) -> Line:
    found, currency = changes.revenue, changes.tonight.currency
    if not found.parts:
        total = "not known here" if found.tonight is None else f"{money(found.tonight)} {currency}"
        return Line("Revenue to come", f"In all {total}; nothing to compare it with like for like.")
    size = abs(found.change)
    way = "more" if found.change > 0 else "less"
    moved = f"{money(size)} {currency} {way} than last night" if round(size) else "the same as last night"
    sold = "No seats were sold on them since"
    if found.seats_sold > 0:
        seats, worth = count_of(found.seats_sold, "seat"), money(found.sold_worth)
        sold = f"{seats} sold on them since, worth {worth} {currency} at last night's bid prices"
    elif found.seats_sold < 0:
        sold = f"{count_of(-found.seats_sold, 'seat')} came back on them since"
    alike = f"{count_of(found.departures, 'departure')} that both nights sell"
    return Line("Revenue to come", f"{money(found.now)} {currency} on {alike}, {moved}. {sold}.")


def _prices(changes: Changes) -> Line:
    found, currency = changes.prices, changes.tonight.currency
    if found is None:
        return Line("Prices", "Tonight's prices are the first ones.")
    if not found.moves:
        return Line("Prices", f"No price moved on {count_of(found.legs, 'departure')}.")
    first = found.moves[0]
    way = "up" if first.move > 0 else "down"
    return Line(
        "Prices",
        f"{found.rose:,} rose and {found.fell:,} fell of {found.legs:,}. Most money on {first.leg}, {first.route}, "
        f"{first.departs}: {price_text(first.now)} {currency}, {way} {price_text(abs(shown_move(first)))}. "
        f"{cause_sentence(first, currency)}",
    )


def _products(changes: Changes) -> Line:
    found, currency = changes.products, changes.tonight.currency
    stake = f"{money(found.tonight.at_stake)} {currency} at stake where leg-level control would decide otherwise"
    if found.last is None:
        return Line("Products", f"{stake}, on {count_of(found.tonight.products, 'product')}.")
    difference = found.tonight.at_stake - found.last.at_stake
    moved = f", {signed(difference, 0)} since last night" if round(difference) else ", as last night"
    closed, opened = found.closed_totals, found.opened_totals
    return Line(
        "Products",
        f"{closed.products:,} closed ({closed.passengers:,.0f} passengers expected, {money(closed.fares)} {currency} "
        f"of fares) and {opened.products:,} opened ({opened.passengers:,.0f} passengers, {money(opened.fares)} "
        f"{currency}). {stake}{moved}.",
    )


def _some(names: Iterable[str], count: int | None = None, most: int = 3) -> str:
    """Name the first few, and how many more there are."""
    listed = list(names)
    more = (len(listed) if count is None else count) - min(len(listed), most)
    return ", ".join(listed[:most]) + (f" and {more:,} more" if more > 0 else "")
