"""What ``legworth nights list`` prints, and the same as JSON."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

from rich.console import Console
from rich.table import Table

from legworth.report import console_for_output, money
from legworth.store.night import Night
from legworth.store.stopped import StoppedNight
from network.counted import counted
from network.errors import NightDamagedError

__all__ = ["night_line", "nights_as_json", "print_nights"]

NAMED = 5
"""Stopped nights named at most."""
MIDDLE, WIDE = 118, 134
"""Columns of a terminal that hold the middle and the whole table."""
COLUMNS = (
    ("Night", "left", 0),
    ("In force", "left", 0),
    ("Snapshot, local", "left", MIDDLE),
    ("Published, UTC", "left", 0),
    ("Legs", "right", 0),
    ("Products", "right", MIDDLE),
    ("Parts", "right", WIDE),
    ("Taken over", "right", WIDE),
    ("Revenue to come", "right", 0),
    ("Seconds", "right", MIDDLE),
)
"""Heading, side, and how wide a terminal must be for a column to be shown."""


def nights_as_json(nights: Sequence[Night], in_force: str | None) -> list[dict[str, Any]]:
    """One record a night, oldest first; of a damaged one, what is wrong."""
    return [night_line(night, in_force) for night in nights]


def print_nights(nights: Sequence[Night], in_force: str | None, stopped: Sequence[StoppedNight] = ()) -> None:
    """Print one line a night, oldest first, then what was forced or is damaged, and what a check stopped."""
    console = console_for_output()
    lines = nights_as_json(nights, in_force)
    currencies = sorted({line["currency"] for line in lines if line.get("currency")})
    title = f"Nights (revenue in {', '.join(currencies)})" if currencies else "Nights"
    table = Table(title=title, title_justify="left")
    shown = [(heading, side) for heading, side, width in COLUMNS if console.width >= width]
    for heading, side in shown:
        table.add_column(heading, justify="right" if side == "right" else "left", no_wrap=heading == "Night")
    for line in lines:
        cells = _cells(line)
        table.add_row(*(cells.get(heading, "") for heading, _ in shown))
    console.print(table, highlight=False)
    for line in lines:
        if line["faults"]:
            _say(console, f"{line['night']} is damaged: {line['faults'][0]}; look with `legworth nights verify`")
        if line.get("forced"):
            _say(console, f"{line['night']} was forced by {line['forced']['who']}: {line['forced']['reason']}")
    _print_stopped(console, stopped)


def _cells(line: dict[str, Any]) -> dict[str, str]:
    """The cells of a night by heading; of a damaged one its name alone, and whether it is in force."""
    cells = {"Night": line["night"], "In force": "yes" if line["in_force"] else ""}
    if line["faults"]:
        return cells
    return cells | {
        "Snapshot, local": str(line["as_of"])[:16].replace("T", " "),
        "Published, UTC": str(line["published"])[:16].replace("T", " "),
        "Legs": f"{line['legs']:,}",
        "Products": f"{line['products']:,}",
        "Parts": f"{line['parts']:,}",
        "Taken over": f"{line['taken_over']:,}",
        "Revenue to come": "" if line["objective"] is None else money(line["objective"]),
        "Seconds": f"{line['seconds']:,.0f}",
    }


def _print_stopped(console: Console, stopped: Sequence[StoppedNight]) -> None:
    """Name the latest stopped nights that nothing has superseded, then those superseded, in one line."""
    left = [night for night in stopped if night.superseded_by is None]
    for night in left[-NAMED:]:
        _say(console, f"{night.name} was stopped by a check and not published: {night.why()}; read {night.file}")
    if len(left) > NAMED:
        more = counted(len(left) - NAMED, "earlier night was stopped", "earlier nights were stopped")
        _say(console, f"{more} too; read {left[0].file.parent}")
    over = [f"{night.name} (by {night.superseded_by})" for night in stopped if night.superseded_by is not None]
    if over:
        more = f", and {len(over) - NAMED:,} earlier" if len(over) > NAMED else ""
        _say(
            console, f"Stopped too, but superseded since by a night that is published: {', '.join(over[-NAMED:])}{more}"
        )


def _say(console: Console, line: str) -> None:
    console.print(line, highlight=False, soft_wrap=not console.is_terminal)


def night_line(night: Night, in_force: str | None) -> dict[str, Any]:
    """What a list says of a night; of one without a manifest, what is wrong alone."""
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
        "network": manifest.network,
        "currency": night.currency,
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
