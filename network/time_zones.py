"""Time zones by their IANA names."""

from __future__ import annotations

from zoneinfo import ZoneInfo, ZoneInfoNotFoundError

__all__ = ["zone_named"]


def zone_named(name: str) -> ZoneInfo | None:
    """Return the zone of an IANA name, or None if there is none."""
    try:
        return ZoneInfo(name)
    except (ZoneInfoNotFoundError, ValueError, OSError):
        return None
