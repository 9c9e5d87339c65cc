"""What the schedule command prints: a short table for people, and the same as JSON."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
from rich.table import Table

from legworth.report import CAUTION, console_for_output, faults_as_json
from legworth.schedules.folder import MadeFolder
from legworth.schedules.timetable import Timetable
from network import counted

__all__ = ["print_schedule", "schedule_as_json"]

NAMED = 5
"""Legs gone with seats sold that are named."""


def schedule_as_json(out: Path, timetable: Timetable, made: MadeFolder) -> dict[str, Any]:
    """Everything that was made, left out and noticed, as one document."""
    first, last = _dates(timetable)
    return {
        "ok": True,
        "folder": str(out),
        "files": list(made.files),
        "stations": len(timetable.places),
        "legs": len(timetable),
        "seats": int(timetable.capacity.sum()),
        "first_departure": first,
        "last_departure": last,
        "through_legs": int((timetable.through >= 0).sum()),
        "left_out": timetable.left_out,
        "connections": None if made.connections is None else made.connections.as_dict(),
        "legs_with_sold_kept": made.kept_sold,
        "legs_sold_but_gone": made.lost_sold.tolist(),
        "rows_without_itinerary": made.without_itinerary,
        "new_settings": made.new_settings,
        "faults": faults_as_json(timetable.warnings),
    }


def print_schedule(out: Path, timetable: Timetable, made: MadeFolder) -> None:
    """Print what was made, left out and noticed."""
    console = console_for_output()
    for warning in timetable.warnings:
        console.print(str(warning), highlight=False, soft_wrap=True)
    first, last = _dates(timetable)
    facts = Table.grid(padding=(0, 2))
    facts.add_row(
        "Legs", f"{len(timetable):,}", f"{counted(timetable.capacity.sum(), 'seat')}, departing {first} to {last}"
    )
    facts.add_row("Stations", f"{len(timetable.places):,}", _without(timetable))
    for reason, count in timetable.left_out.items():
        if not count:
            continue
        facts.add_row("Left out", f"{count:,}", reason)
    if made.connections is not None:
        changes = made.connections.as_dict()["by_vehicles"]
        words = {"1": "without a change", "2": "with one change", "3": "with two changes"}
        parts = ", ".join(f"{count:,} {words[vehicles]}" for vehicles, count in changes.items())
        facts.add_row("Itineraries", f"{len(made.connections):,}", parts)
        for dropped in made.connections.dropped.values():
            if dropped.count:
                facts.add_row("Dropped", f"{dropped.count:,}", f"{dropped.what}: {dropped.why}")
    if made.kept_sold:
        keeps = "leg keeps" if made.kept_sold == 1 else "legs keep"
        facts.add_row("Seats sold", f"{made.kept_sold:,}", f"{keeps} the seats sold that the folder had")
    console.print(facts, highlight=False)
    if len(made.lost_sold):
        names = ", ".join(map(str, made.lost_sold[:NAMED])) + (", ..." if len(made.lost_sold) > NAMED else "")
        console.print(
            f"Caution: {counted(len(made.lost_sold), 'leg with seats sold is', 'legs with seats sold are')} not in "
            f"this schedule ({names}). Their passengers need another way.",
            highlight=False,
            soft_wrap=True,
        )
    for file, count in made.without_itinerary.items():
        console.print(
            counted(count, f"row of {file} names an itinerary", f"rows of {file} name itineraries")
            + " that the new schedule does not have; legworth check lists them",
            highlight=False,
            soft_wrap=True,
        )
    if made.new_settings:
        console.print("network.toml is new; correct name, currency and as_of there", highlight=False)
    console.print(f"Written to {out}: {', '.join(made.files)}", highlight=False, soft_wrap=True)
    console.print(CAUTION, style="dim", highlight=False, soft_wrap=True)


def _dates(timetable: Timetable) -> tuple[str, str]:
    local = (timetable.departs + timetable.departs_offset * 60).astype("datetime64[s]").astype("datetime64[D]")
    return str(local.min()), str(local.max())


def _without(timetable: Timetable) -> str:
    places = timetable.places
    missing = (
        (int(np.isnan(places.latitude * places.longitude).sum()), "coordinates"),
        (int((places.timezone == "").sum()), "a time zone"),
    )
    return ", ".join(f"{count:,} without {what}" for count, what in missing if count)
