"""What the commands of ``legworth nights`` print, and the same as JSON."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

import pyarrow as pa
from rich.table import Table

from legworth.report import CAUTION, console_for_output, money, price_text
from legworth.store.check_words import check_title, figure_text, outcome_word
from legworth.store.comparison import NightComparison
from legworth.store.history import HistoryEntry
from legworth.store.night import Night
from network.errors import NightDamagedError

__all__ = [
    "night_as_json",
    "nights_as_json",
    "print_comparison",
    "print_faults",
    "print_night",
    "print_nights",
    "print_rows",
    "rows_as_json",
]

NAMED = 10


def nights_as_json(nights: Sequence[Night], in_force: str | None) -> list[dict[str, Any]]:
    """One record a night, oldest first; of a damaged one, what is wrong."""
    return [_line(night, in_force) for night in nights]


def print_nights(nights: Sequence[Night], in_force: str | None, stopped: Sequence[Path] = ()) -> None:
    """Print one line a night, oldest first, and the latest nights that a check stopped."""
    console = console_for_output()
    table = Table(title="Nights", title_justify="left")
    table.add_column("Night", no_wrap=True)
    table.add_column("In force")
    table.add_column("Snapshot, local", no_wrap=True)
    table.add_column("Published, UTC", no_wrap=True)
    for heading in ("Legs", "Products", "Parts", "Taken over", "Revenue to come", "Seconds"):
        table.add_column(heading, justify="right")
    table.add_column("Remark")
    for line in nights_as_json(nights, in_force):
        mark = "yes" if line["in_force"] else ""
        if line["faults"]:
            table.add_row(line["night"], mark, *[""] * 8, f"damaged: {line['faults'][0]}")
            continue
        table.add_row(
            line["night"],
            mark,
            str(line["as_of"])[:16].replace("T", " "),
            str(line["published"])[:16].replace("T", " "),
            *(f"{line[name]:,}" for name in ("legs", "products", "parts", "taken_over")),
            "" if line["objective"] is None else money(line["objective"]),
            f"{line['seconds']:,.0f}",
            f"forced by {line['forced']['who']}: {line['forced']['reason']}" if line["forced"] else "",
        )
    console.print(table, highlight=False)
    if stopped:
        latest, more = stopped[-1], f" and {len(stopped) - 1:,} before it" if len(stopped) > 1 else ""
        what = f"Stopped by a check and not published: {latest.stem}{more}; what to look at first: {latest}"
        console.print(what, highlight=False, soft_wrap=True)


def _line(night: Night, in_force: str | None) -> dict[str, Any]:
    faults = night.quick_faults()
    head = {"night": night.name, "in_force": night.name == in_force, "faults": list(faults)}
    try:
        manifest = night.manifest
    except NightDamagedError:
        return head
    objectives = [part.objective for part in manifest.parts]
    return head | {
        "as_of": manifest.as_of.isoformat(),
        "published": None if manifest.published is None else manifest.published.isoformat(),
        "before": manifest.before,
        "legs": sum(part.legs for part in manifest.parts),
        "itineraries": sum(part.itineraries for part in manifest.parts),
        "products": sum(part.products for part in manifest.parts),
        "parts": len(manifest.parts),
        "taken_over": sum(part.taken_over_from is not None for part in manifest.parts),
        "objective": None if None in objectives else sum(value for value in objectives if value is not None),
        "seconds": sum(manifest.seconds.values()),
        "bytes": sum(entry.bytes for entry in manifest.files.values()),
        "forced": None if manifest.forced is None else manifest.forced.model_dump(),
    }


def night_as_json(night: Night, in_force: str | None, history: Sequence[HistoryEntry]) -> dict[str, Any]:
    """Everything about one night but its list of files."""
    manifest = night.manifest.model_dump(mode="json", exclude={"files"})
    return {
        **_line(night, in_force),
        "manifest": manifest,
        "history": [entry.model_dump(mode="json") for entry in history if entry.night == night.name],
    }


def print_night(night: Night, in_force: str | None, history: Sequence[HistoryEntry]) -> None:
    """Print what a night holds, how it came about and what became of it."""
    console = console_for_output()
    line, manifest = _line(night, in_force), night.manifest
    console.print(f"Night {night.name}{', in force' if line['in_force'] else ''}", style="bold", highlight=False)
    facts = Table.grid(padding=(0, 2))
    facts.add_row("Snapshot", manifest.as_of.isoformat())
    facts.add_row("Night before", manifest.before or "none")
    facts.add_row(
        "Holds",
        f"{line['legs']:,} legs, {line['itineraries']:,} itineraries, {line['products']:,} products in "
        f"{line['parts']:,} parts, {line['taken_over']:,} of them taken over; {line['bytes'] / 1e6:,.1f} MB",
    )
    if line["objective"] is not None:
        facts.add_row("Revenue to come", f"{money(line['objective'])}, by the optimum of its programs")
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
            f"Revenue to come on the {found.parts:,} parts that both have: {money(found.revenue_before)} then, "
            f"{money(found.revenue_after)} now, {found.revenue_after - found.revenue_before:+,.0f}",
            highlight=False,
        )
    console.print(
        f"{len(found.moved):,} of {found.legs:,} legs that both have changed their bid price", highlight=False
    )
    for word, legs in (("added", found.added), ("departed", found.departed), ("gone before departure", found.gone)):
        if legs:
            more = f" and {len(legs) - NAMED:,} more" if len(legs) > NAMED else ""
            console.print(
                f"{len(legs):,} legs {word}: {', '.join(legs[:NAMED])}{more}", highlight=False, soft_wrap=True
            )
    if len(found.moved):
        shown = found.moved.head(top)
        table = Table(title=f"The {len(shown)} greatest moves (currency a seat)", title_justify="left")
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
    console.print(f"{len(faults):,} nights verified, {bad:,} damaged", highlight=False)


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
        console.print(f"... and {rows.num_rows - limit:,} more rows; --format csv prints them all", highlight=False)


def _cell(value: Any) -> str:
    if value is None:
        return ""
    return f"{value:,.2f}" if isinstance(value, float) else str(value)
