"""What the commands of ``legworth nights`` print, and the same as JSON."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import Any

import pyarrow as pa
from rich.table import Table

from legworth.report import CAUTION, console_for_output, money, price_text
from legworth.store.check_words import check_title, figure_text, outcome_word
from legworth.store.comparison import NightComparison
from legworth.store.history import HistoryEntry
from legworth.store.listing import night_line
from legworth.store.night import Night
from network.counted import counted

__all__ = [
    "night_as_json",
    "print_comparison",
    "print_faults",
    "print_night",
    "print_rows",
    "rows_as_json",
]

NAMED = 10


def night_as_json(night: Night, in_force: str | None, history: Sequence[HistoryEntry]) -> dict[str, Any]:
    """Everything about one night but its list of files."""
    manifest = night.manifest.model_dump(mode="json", exclude={"files"})
    return {
        **night_line(night, in_force),
        "manifest": manifest,
        "history": [entry.model_dump(mode="json") for entry in history if entry.night == night.name],
    }


def print_night(night: Night, in_force: str | None, history: Sequence[HistoryEntry]) -> None:
    """Print what a night holds, how it came about and what became of it."""
    console = console_for_output()
    line, manifest = night_line(night, in_force), night.manifest
    console.print(f"Night {night.name}{', in force' if line['in_force'] else ''}", style="bold", highlight=False)
    facts = Table.grid(padding=(0, 2))
    facts.add_row("Snapshot", manifest.as_of.isoformat())
    facts.add_row("Night before", manifest.before or "none")
    facts.add_row(
        "Holds",
        f"{counted(line['legs'], 'leg')}, {counted(line['itineraries'], 'itinerary')}, "
        f"{counted(line['products'], 'product')} in {counted(line['parts'], 'part')}, "
        f"{line['taken_over']:,} of them taken over; {line['bytes'] / 1e6:,.1f} MB",
    )
    if line["objective"] is not None:
        facts.add_row(
            "Revenue to come", f"{_money(line['objective'], line['currency'])}, by the optimum of its programs"
        )
    facts.add_row(
        "Seconds", ", ".join(f"{phase} {value:,.1f}" for phase, value in manifest.seconds.items()) or "unknown"
    )
    for fault in line["faults"][:NAMED]:
        facts.add_row("Damaged", fault)
    console.print(facts, highlight=False)
    console.print(f"Folder {night.folder}", highlight=False, soft_wrap=True)
    if manifest.checks:
        console.print(_checks(night), highlight=False)
    for entry in history:
        if entry.night == night.name:
            why = f": {entry.reason}" if entry.reason else ""
            console.print(f"{entry.at:%Y-%m-%d %H:%M:%S}Z  {entry.event} by {entry.who}{why}", highlight=False)
    console.print(CAUTION, style="dim", highlight=False, soft_wrap=True)


def _checks(night: Night) -> Table:
    table = Table(title="Checks", title_justify="left")
    table.add_column("Check")
    table.add_column("Found", justify="right")
    table.add_column("Limit", justify="right")
    table.add_column("Outcome")
    table.add_column("Look first at", overflow="fold")
    for check in night.manifest.checks:
        figures = (figure_text(check, value) for value in (check.found, check.limit))
        look = "" if check.passed else "; ".join(check.look_at[:3])
        table.add_row(check_title(check), *figures, outcome_word(check), look)
    return table


def print_comparison(found: NightComparison, top: int) -> None:
    """Print how two nights differ."""
    console = console_for_output()
    console.print(f"From {found.before} to {found.after}", style="bold", highlight=False)
    if found.revenue_before is not None and found.revenue_after is not None:
        console.print(
            f"Revenue to come on the {counted(found.parts, 'part')} that both have: "
            f"{_money(found.revenue_before, found.currency)} then, {_money(found.revenue_after, found.currency)} now, "
            f"{found.revenue_after - found.revenue_before:+,.0f}",
            highlight=False,
            soft_wrap=True,
        )
    unlike = " and that were still to depart" if found.departed else ""
    console.print(
        f"{len(found.moved):,} of {counted(found.legs, 'leg')} that both have{unlike} changed their bid price",
        highlight=False,
    )
    kinds = (
        ("added", found.added),
        ("departed by the later snapshot", found.departed),
        ("gone before departure", found.gone),
    )
    for word, legs in kinds:
        if legs:
            more = f" and {len(legs) - NAMED:,} more" if len(legs) > NAMED else ""
            console.print(
                f"{counted(len(legs), 'leg')} {word}: {', '.join(legs[:NAMED])}{more}", highlight=False, soft_wrap=True
            )
    if len(found.moved):
        shown = found.moved.head(top)
        unit = f" ({found.currency} a seat)" if found.currency else " a seat"
        which = f"The {len(shown):,} greatest moves" if len(shown) > 1 else "The greatest move"
        table = Table(title=f"{which}{unit}", title_justify="left")
        table.add_column("Leg")
        table.add_column("Part")
        for heading in ("Then", "Now", "Move", "Seats left then", "Seats left now"):
            table.add_column(heading, justify="right")
        for row in shown.to_dict(orient="records"):
            table.add_row(
                row["leg"],
                row["part"],
                price_text(row["before"]),
                price_text(row["after"]),
                f"{row['difference']:+,.2f}",
                f"{row['remaining_before']:,}",
                f"{row['remaining_after']:,}",
            )
        console.print(table, highlight=False)
    console.print(CAUTION, style="dim", highlight=False, soft_wrap=True)


def print_faults(faults: Mapping[str, Sequence[str]]) -> None:
    """Print what a verification of nights found."""
    console = console_for_output()
    for name, lines in faults.items():
        for line in lines:
            console.print(f"{name}: {line}", highlight=False, soft_wrap=True)
    bad = sum(bool(lines) for lines in faults.values())
    console.print(f"{counted(len(faults), 'night')} verified, {bad:,} damaged", highlight=False)


def _money(value: float, currency: str | None) -> str:
    """Whole currency units, with the currency where it is known."""
    return f"{money(value)} {currency}" if currency else money(value)


def rows_as_json(rows: pa.Table) -> dict[str, Any]:
    """Answer to a query as one document, null where a figure is none."""
    return {"columns": rows.column_names, "rows": _finite(rows.to_pylist())}


def _finite(value: Any) -> Any:
    if isinstance(value, dict):
        return {str(key): _finite(item) for key, item in value.items()}
    if isinstance(value, list | tuple):
        return [_finite(item) for item in value]
    return None if isinstance(value, float) and not math.isfinite(value) else value


def print_rows(rows: pa.Table, limit: int) -> None:
    """Print the first rows of an answer."""
    console = console_for_output()
    table = Table()
    numeric = [pa.types.is_integer(field.type) or pa.types.is_floating(field.type) for field in rows.schema]
    for name, right in zip(rows.column_names, numeric, strict=True):
        table.add_column(name, justify="right" if right else "left", overflow="fold")
    for record in rows.slice(0, limit).to_pylist():
        table.add_row(*(_cell(value) for value in record.values()))
    console.print(table, highlight=False)
    if rows.num_rows > limit:
        more = counted(rows.num_rows - limit, "more row")
        console.print(f"... and {more}; --format csv prints them all", highlight=False)


def _cell(value: Any) -> str:
    if value is None:
        return ""
    return f"{value:,.2f}" if isinstance(value, float) else str(value)
