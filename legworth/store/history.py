"""Who put which night in force, when and why: one JSON line per event, only ever added to."""

from __future__ import annotations

import getpass
from datetime import UTC, datetime
from pathlib import Path
from typing import Annotated, Literal

from pydantic import AwareDatetime, BaseModel, ConfigDict, Field, ValidationError

from legworth.store.disk import append_line

__all__ = ["IN_FORCE", "HistoryEntry", "append_entry", "read_history", "user_name"]

Event = Literal["publish", "force", "restore", "withdrawn", "thin"]
IN_FORCE = ("publish", "force", "restore")
"""Events that put a night in force."""


class HistoryEntry(BaseModel):
    """One line of the history.

    The line is written just before the night is put in force. Where a crash came between, the next process that
    holds the lock adds a line ``withdrawn``; what is in force is always said by ``in_force`` alone.
    """

    model_config = ConfigDict(frozen=True, extra="forbid")

    event: Annotated[Event, Field(description="What was done.")]
    night: Annotated[str, Field(description="With which night.")]
    manifest: Annotated[str | None, Field(description="SHA-256 of its manifest.")] = None
    at: Annotated[AwareDatetime, Field(description="Instant, by this machine's clock.")]
    who: Annotated[str, Field(description="Name of the user.")]
    reason: Annotated[str | None, Field(description="Why.")] = None

    @classmethod
    def now(
        cls, event: Event, night: str, manifest: str | None, who: str | None = None, reason: str | None = None
    ) -> HistoryEntry:
        """Make an entry of this moment, by the user of this process if nobody is named."""
        return cls(
            event=event, night=night, manifest=manifest, at=datetime.now(UTC), who=who or user_name(), reason=reason
        )


def user_name() -> str:
    """Name of the user who runs this process, ``unknown`` where the system has none."""
    try:
        return getpass.getuser()
    except (OSError, KeyError, ImportError):
        return "unknown"


def append_entry(path: Path, entry: HistoryEntry) -> None:
    """Add one entry and sync it; OSError leaves the history as it was."""
    append_line(path, entry.model_dump_json(exclude_none=True))


def read_history(path: Path) -> tuple[HistoryEntry, ...]:
    """Read the history, oldest first; lines that a crash has spoiled are passed over."""
    try:
        lines = path.read_bytes().splitlines()
    except FileNotFoundError:
        return ()
    entries = []
    for line in lines:
        try:
            entries.append(HistoryEntry.model_validate_json(line))
        except ValidationError:
            continue
    return tuple(entries)
