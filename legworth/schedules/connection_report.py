"""What the connection rules dropped: counts by rule, with examples."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field
from typing import Any

from network.arrays import IntArray

__all__ = ["RULES", "Dropped", "Tally"]

PAIRS, ITINERARIES = "pairs of legs", "itineraries"

RULES = {
    "minimum_connection": (PAIRS, "less time than the station needs"),
    "maximum_connection": (PAIRS, "more time than the longest connection, within a day of arriving"),
    "minimum_by_kinds": (PAIRS, "less time than the two kinds of legs need"),
    "overnight": (PAIRS, "leaves on another date than it arrives"),
    "return": (ITINERARIES, "comes back to a station already visited"),
    "wanted": (ITINERARIES, "between stations for which nothing is sold or asked"),
    "permitted": (ITINERARIES, "passengers may not be carried so"),
    "detour": (ITINERARIES, "too long for the direct way"),
    "dominated": (ITINERARIES, "another itinerary is better in time and legs"),
    "most_per_day": (ITINERARIES, "beyond the number for two stations and a date"),
}
"""The rules in the order in which they are applied: what each counts, and what it finds wrong.

Whatever fails several rules counts under the first.
"""


@dataclass(frozen=True)
class Dropped:
    """What one rule dropped: how many, of what, why, and the first few in words."""

    count: int
    what: str
    why: str
    examples: tuple[str, ...]

    def as_dict(self) -> dict[str, Any]:
        """The same for JSON."""
        return {"count": self.count, "what": self.what, "why": self.why, "examples": list(self.examples)}


@dataclass
class Tally:
    """Collects what is dropped, by rule; ``most_examples`` are kept of each.

    ``unjudged`` counts connections whose detour is not known because a station has no coordinates.
    """

    most_examples: int = 5
    unjudged: int = 0
    count: dict[str, int] = field(default_factory=lambda: dict.fromkeys(RULES, 0))
    examples: dict[str, list[str]] = field(default_factory=lambda: {rule: [] for rule in RULES})

    def note(self, rule: str, rows: IntArray, words: Callable[[int], str]) -> None:
        """Count rows that a rule dropped; ``words`` tells one of them."""
        self.count[rule] += len(rows)
        self.show(rule, rows, words)

    def show(self, rule: str, rows: IntArray, words: Callable[[int], str]) -> None:
        """Keep examples without counting."""
        missing = self.most_examples - len(self.examples[rule])
        self.examples[rule] += [words(int(row)) for row in rows[: max(missing, 0)]]

    def dropped(self) -> dict[str, Dropped]:
        """Everything noted, by rule."""
        return {
            rule: Dropped(self.count[rule], what, why, tuple(self.examples[rule]))
            for rule, (what, why) in RULES.items()
        }
