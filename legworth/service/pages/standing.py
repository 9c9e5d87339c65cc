"""How the night in force stands: put back, later ones stopped, published in spite of checks; each thing said once."""

from __future__ import annotations

import json
from collections.abc import Sequence
from dataclasses import dataclass, replace
from datetime import UTC
from pathlib import Path

from pydantic import TypeAdapter

from legworth.store import Check, HistoryEntry, Night, Store
from legworth.store.check_words import check_line
from legworth.store.history import IN_FORCE
from legworth.store.manifest import night_number

__all__ = ["Alert", "alerts_of"]

LISTED = 10
"""Legs, or nights, that an alert names; it tells how many more there are."""
CHECKS = TypeAdapter(tuple[Check, ...])


@dataclass(frozen=True)
class Alert:
    """Something to know before anything else.

    Attributes
    ----------
    title
        What happened, a sentence.
    said
        The reason that somebody gave; empty if nobody gave one.
    lines
        Checks that failed, or other reasons, one each.
    look_at
        What to look at first, each leg once.
    as_before
        Whether an alert before this one names the same to look at, so that it is not said again.
    """

    title: str
    said: str = ""
    lines: tuple[str, ...] = ()
    look_at: tuple[str, ...] = ()
    as_before: bool = False


def alerts_of(store: Store, night: Night) -> list[Alert]:
    """Say what stands in the way of trusting a night blindly, most urgent first; it reads the store."""
    number = night.manifest.number
    alerts = [*_put_back(store, night, number), *_stopped(store, number), *_failed(night)]
    seen: set[tuple[str, ...]] = set()
    told = []
    for alert in alerts:
        told.append(replace(alert, as_before=bool(alert.look_at) and alert.look_at in seen))
        seen.add(alert.look_at)
    return told


def _put_back(store: Store, night: Night, number: int) -> list[Alert]:
    """Who put the night back in force and why, and the later nights that are not."""
    later = [each.name for each in store.nights() if (night_number(each.name) or 0) > number]
    lines = (f"later nights of the store, not in force: {_list(later)}",) if later else ()
    entry = _latest(store.history(), night.name)
    if entry is not None and entry.event == "restore":
        when = entry.at.astimezone(UTC).strftime("%Y-%m-%d %H:%M")
        title = f"Night {night.name} was put back in force by {entry.who} on {when} UTC."
        return [Alert(title, entry.reason or "", lines)]
    return [Alert(f"Night {night.name} is not the latest of the store.", "", lines)] if later else []


def _latest(history: Sequence[HistoryEntry], name: str) -> HistoryEntry | None:
    """The entry that put a night in force last, those withdrawn left out."""
    found: list[HistoryEntry] = []
    for entry in history:
        if entry.night == name and entry.event in IN_FORCE:
            found.append(entry)
        elif entry.night == name and entry.event == "withdrawn" and found:
            found.pop()
    return found[-1] if found else None


def _stopped(store: Store, number: int) -> list[Alert]:
    """Nights after the one in force that a check stopped; those stopped by the same are told together."""
    names: dict[tuple[tuple[str, ...], tuple[str, ...]], list[str]] = {}
    for path in store.stopped():
        if (night_number(path.stem) or 0) > number:
            names.setdefault(_record(path), []).append(path.stem)
    return [
        Alert(
            f"Night {each[0]} was stopped and is not in force."
            if len(each) == 1
            else f"Nights {_list(each)} were stopped and are not in force.",
            lines=lines,
            look_at=look_at,
        )
        for (lines, look_at), each in names.items()
    ]


def _record(path: Path) -> tuple[tuple[str, ...], tuple[str, ...]]:
    """Why a night was stopped, and what to look at first."""
    try:
        said = json.loads(path.read_bytes())
        failed = [check for check in CHECKS.validate_python(said.get("checks", [])) if not check.passed]
        if failed:
            return _lines(failed), _look_at(failed)
        return tuple(str(reason) for reason in said.get("reasons", [])), ()
    except (OSError, ValueError, AttributeError, TypeError, RecursionError):
        return ("its record cannot be read",), ()


def _failed(night: Night) -> list[Alert]:
    """Checks that the night itself failed, and who published it all the same."""
    forced, failed = night.manifest.forced, [check for check in night.manifest.checks if not check.passed]
    if forced is not None:
        title = f"Published by {forced.who} in spite of a check."
        return [Alert(title, forced.reason, _lines(failed), _look_at(failed))]
    return [Alert("A check failed.", "", _lines(failed), _look_at(failed))] if failed else []


def _lines(failed: Sequence[Check]) -> tuple[str, ...]:
    return tuple(check_line(check.model_copy(update={"look_at": ()})) for check in failed)


def _look_at(failed: Sequence[Check]) -> tuple[str, ...]:
    """What the checks name, each leg once with all that is said of it."""
    said: dict[str, list[str]] = {}
    for check in failed:
        for entry in check.look_at:
            # Names of legs hold no spaces, so that the first colon before one ends the name.
            name, colon, words = entry.partition(": ")
            if not colon or " " in name:
                name, words = entry, ""
            found = said.setdefault(name, [])
            words = f"demand to come {words}" if check.name == "demand_total" and words else words
            if words and words not in found:
                found.append(words)
    told = [f"{name} ({', '.join(words)})" if words else name for name, words in said.items()]
    return (*told[:LISTED], *([f"and {len(told) - LISTED:,} more"] if len(told) > LISTED else []))


def _list(names: Sequence[str]) -> str:
    """Names in a row, the latest ones if there are many."""
    if len(names) > LISTED:
        return f"{', '.join(names[-LISTED:])}, and {len(names) - LISTED:,} before them"
    return " and ".join([*([", ".join(names[:-1])] if len(names) > 1 else []), *names[-1:]])
