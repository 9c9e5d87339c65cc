"""The run itself: was every optimum proved, did the checks hold, what was solved, how long did it take."""

from __future__ import annotations

from collections import Counter
from dataclasses import dataclass

from legworth.store.manifest import Check, Forced, Manifest

__all__ = ["RunHealth", "SlowPart"]

SLOWEST = 5


@dataclass(frozen=True)
class SlowPart:
    """A part and the seconds that its phases took together."""

    part: str
    products: int
    seconds: float


@dataclass(frozen=True)
class RunHealth:
    """Health of a run.

    Attributes
    ----------
    parts, solved, taken_over
        Parts in all, solved tonight, and taken over unsolved because nothing that decides them changed.
    certified
        Parts whose certificate holds.
    not_certified
        Names of the others; a night with any is never published.
    greatest_gap
        Greatest relative gap between the two objectives of a certificate.
    checks
        Checks against the night before, those that failed first.
    forced
        Who published in spite of a check, and why.
    seconds, part_seconds
        Seconds by phase of the whole run, and of its parts together: core seconds, since parts run side by side.
    slowest
        Parts that took longest.
    rows
        Rows by table.
    legs, itineraries, products
        Sizes.
    """

    parts: int
    solved: int
    taken_over: int
    certified: int
    not_certified: tuple[str, ...]
    greatest_gap: float
    checks: tuple[Check, ...]
    forced: Forced | None
    seconds: dict[str, float]
    part_seconds: dict[str, float]
    slowest: tuple[SlowPart, ...]
    rows: dict[str, int]
    legs: int
    itineraries: int
    products: int

    @classmethod
    def of(cls, manifest: Manifest) -> RunHealth:
        """Read it from a manifest, whether that of a published night or of one about to be."""
        parts = manifest.parts
        bad = tuple(part.name for part in parts if not part.certified)
        solved = [part for part in parts if part.taken_over_from is None]
        part_seconds: Counter[str] = Counter()
        for part in parts:
            part_seconds.update(part.seconds)
        took = sorted(
            ((sum(part.seconds.values()), part) for part in solved), key=lambda pair: (-pair[0], pair[1].name)
        )
        return cls(
            parts=len(parts),
            solved=len(solved),
            taken_over=len(parts) - len(solved),
            certified=len(parts) - len(bad),
            not_certified=bad,
            greatest_gap=max(
                (abs(float(found.get("gap", 0.0))) for part in parts for found in part.certificates), default=0.0
            ),
            checks=tuple(sorted(manifest.checks, key=lambda check: check.passed)),
            forced=manifest.forced,
            seconds=dict(manifest.seconds),
            part_seconds=dict(part_seconds),
            slowest=tuple(SlowPart(part.name, part.products, seconds) for seconds, part in took[:SLOWEST]),
            rows=dict(manifest.rows),
            legs=sum(part.legs for part in parts),
            itineraries=sum(part.itineraries for part in parts),
            products=sum(part.products for part in parts),
        )

    @property
    def failed(self) -> tuple[Check, ...]:
        """Checks outside their limits."""
        return tuple(check for check in self.checks if not check.passed)
