"""Which nights are kept: the newest, then the first of each week, then the first of each month.

The scheme is the common practice of backups known as grandfather, father and son.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from datetime import date
from typing import Any

from legworth.store.manifest import night_number
from network.store_settings import StoreSettings

__all__ = ["kept_nights"]


def kept_nights(names: Sequence[str], rule: StoreSettings) -> frozenset[str]:
    """Choose the nights to keep.

    Kept are the newest ``keep_newest`` nights by date of their snapshot; of those before them the first of each ISO
    week, for the ``keep_weeks`` latest weeks that have any, and the first of each month, for the ``keep_months``
    latest months that have any; and the night of the greatest number. Weeks and months are those of the local date
    of the snapshot, so that neither the clock nor a night that failed decides.

    Parameters
    ----------
    names
        Names of the nights, in any order.
    rule
        How many of each.
    """
    ordered = sorted(names, key=lambda name: (_date(name), night_number(name) or 0))
    cut = max(len(ordered) - rule.keep_newest, 0)
    older, kept = ordered[:cut], set(ordered[cut:])
    kept |= _first_of_each(older, lambda day: day.isocalendar()[:2], rule.keep_weeks)
    kept |= _first_of_each(older, lambda day: (day.year, day.month), rule.keep_months)
    return frozenset(kept | set(sorted(names, key=lambda name: night_number(name) or 0)[-1:]))


def _first_of_each(ordered: Sequence[str], period: Callable[[date], Any], count: int) -> set[str]:
    first: dict[Any, str] = {}
    for name in ordered:
        first.setdefault(period(_date(name)), name)
    return set(list(first.values())[len(first) - min(count, len(first)) :])


def _date(name: str) -> date:
    return date.fromisoformat(name.split("-", 1)[1])
