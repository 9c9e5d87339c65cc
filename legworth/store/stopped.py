"""Nights that a check stopped: why, and which later night has taken their place."""

from __future__ import annotations

import json
from dataclasses import dataclass
from datetime import datetime
from pathlib import Path
from typing import TYPE_CHECKING, Any

from pydantic import ValidationError

from legworth.store.check_words import finding
from legworth.store.manifest import Check, night_number
from network.errors import NightDamagedError

if TYPE_CHECKING:
    from legworth.store.store import Store

__all__ = ["StoppedNight", "read_stopped", "stopped_nights"]


@dataclass(frozen=True)
class StoppedNight:
    """A night that a check stopped and that was not published.

    Attributes
    ----------
    name
        Its name.
    file
        What to look at first, ``stopped/NAME.json`` of the store.
    as_of
        Instant of its snapshot; None where the file does not say.
    reasons
        One line a check that stopped it; empty where the file does not say.
    superseded_by
        First later night in the store of the same snapshot or a later one: nothing is left to do about this one.
    """

    name: str
    file: Path
    as_of: datetime | None
    reasons: tuple[str, ...]
    superseded_by: str | None = None

    def why(self) -> str:
        """First reason, and how many more there are."""
        if not self.reasons:
            return "its file does not say why"
        more = f", and {len(self.reasons) - 1:,} more" if len(self.reasons) > 1 else ""
        return f"{self.reasons[0]}{more}"

    def as_dict(self) -> dict[str, Any]:
        """Plain record."""
        return {
            "night": self.name,
            "file": str(self.file),
            "as_of": None if self.as_of is None else self.as_of.isoformat(),
            "reasons": list(self.reasons),
            "superseded_by": self.superseded_by,
        }


def stopped_nights(store: Store) -> tuple[StoppedNight, ...]:
    """All nights that a check stopped, oldest first."""
    later = []
    for night in store.nights():
        try:
            later.append((night.number, night.manifest.as_of, night.name))
        except NightDamagedError:
            continue
    found = []
    for path in store.stopped():
        stopped = read_stopped(path)
        number, as_of = night_number(stopped.name) or 0, stopped.as_of
        by = [name for other, instant, name in later if as_of is not None and other > number and instant >= as_of]
        found.append(StoppedNight(stopped.name, path, as_of, stopped.reasons, by[0] if by else None))
    return tuple(found)


def read_stopped(path: Path) -> StoppedNight:
    """Read why a night was stopped; what a damaged file does not say is left open."""
    try:
        document = json.loads(path.read_bytes())
    except (OSError, ValueError, RecursionError):
        document = None
    if not isinstance(document, dict):
        return StoppedNight(path.stem, path, None, ())
    return StoppedNight(path.stem, path, _instant(document.get("as_of")), _reasons(document))


def _instant(text: object) -> datetime | None:
    try:
        found = datetime.fromisoformat(str(text))
    except ValueError:
        return None
    return None if found.tzinfo is None else found


def _reasons(document: dict[str, Any]) -> tuple[str, ...]:
    """The checks that failed, without what to look at first; the reasons as they are where there are no checks."""
    try:
        checks = [Check.model_validate_json(json.dumps(check)) for check in document["checks"]]
    except (KeyError, TypeError, ValidationError):
        reasons = document.get("reasons")
        return tuple(str(reason) for reason in reasons) if isinstance(reasons, list) else ()
    return tuple(finding(check) for check in checks if not check.passed)
