"""Which nights are kept: the newest, then the first of each week, then the first of each month.

The scheme is the common practice of backups known as grandfather, father and son.
"""

from __future__ import annotations

import os
import stat
from collections import Counter
from collections.abc import Callable, Iterable, Sequence
from contextlib import suppress
from dataclasses import dataclass
from datetime import date
from pathlib import Path
from typing import Any

from legworth.store.manifest import night_number
from network.store_settings import StoreSettings

__all__ = ["Thinning", "freed_bytes", "kept_nights", "reasons_to_keep"]


@dataclass(frozen=True)
class Thinning:
    """What a rule does to a store.

    Attributes
    ----------
    kept
        Nights that stay, oldest first, each with why.
    gone
        Nights that go, oldest first.
    """

    kept: dict[str, str]
    gone: tuple[str, ...]


def kept_nights(names: Sequence[str], rule: StoreSettings) -> frozenset[str]:
    """Names that `reasons_to_keep` has a reason for."""
    return frozenset(reasons_to_keep(names, rule))


def reasons_to_keep(names: Sequence[str], rule: StoreSettings) -> dict[str, str]:
    """Choose the nights to keep, and say why.

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
    older, newest = ordered[:cut], ordered[cut:]
    numbered = sorted(names, key=lambda name: night_number(name) or 0)[-1:]
    months = _first_of_each(older, lambda day: (day.year, day.month), rule.keep_months)
    weeks = _first_of_each(older, lambda day: day.isocalendar()[:2], rule.keep_weeks)
    return {
        **dict.fromkeys(numbered, "the latest by number"),
        **dict.fromkeys(months, "the first of its month"),
        **dict.fromkeys(weeks, "the first of its week"),
        **dict.fromkeys(newest, f"among the newest {rule.keep_newest:,}"),
    }


def freed_bytes(folders: Iterable[Path]) -> int:
    """Bytes that the disk has more when these folders are removed; a file that others link to stays.

    Files that vanish meanwhile are passed over.
    """
    links: Counter[tuple[int, int]] = Counter()
    found: dict[tuple[int, int], os.stat_result] = {}
    for folder in folders:
        for path in folder.rglob("*"):
            with suppress(FileNotFoundError):
                status = path.lstat()
                if not stat.S_ISDIR(status.st_mode):
                    links[status.st_dev, status.st_ino] += 1
                    found[status.st_dev, status.st_ino] = status
    return sum(status.st_size for key, status in found.items() if links[key] >= status.st_nlink)


def _first_of_each(ordered: Sequence[str], period: Callable[[date], Any], count: int) -> set[str]:
    first: dict[Any, str] = {}
    for name in ordered:
        first.setdefault(period(_date(name)), name)
    return set(list(first.values())[len(first) - min(count, len(first)) :])


def _date(name: str) -> date:
    return date.fromisoformat(name.split("-", 1)[1])
