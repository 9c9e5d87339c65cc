"""A snapshot of counts beside the night in force: which of its legs the night does not sell, and which are oversold."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from datetime import UTC, datetime

import numpy as np

from legworth.service.bodies import FAULTS_TOLD, fault_line, lines_told
from legworth.service.messages import NAMED, Counted, LatestCounts
from legworth.service.orders import SeatCount
from legworth.service.served_night import ServedNight
from network.counted import counted

__all__ = ["CountedLegs"]


@dataclass(frozen=True)
class CountedLegs:
    """What is to be said of the legs of a snapshot.

    Attributes
    ----------
    names
        Legs, in the order of the snapshot.
    unknown, oversold
        Positions of those that the night does not sell, and of those with more seats sold than authorised.
    night
        Name of the night in force; None if there is none, and all legs are unknown.
    at
        When the snapshot came.
    """

    names: tuple[str, ...]
    unknown: tuple[int, ...]
    oversold: tuple[int, ...]
    night: str | None
    at: datetime

    @classmethod
    def of(cls, counts: Sequence[SeatCount], night: ServedNight | None) -> CountedLegs:
        """Hold a snapshot against a night."""
        names = tuple(count.leg for count in counts)
        unknown = range(len(names)) if night is None else np.flatnonzero(night.legs.codes_of(names) < 0).tolist()
        oversold = tuple(place for place, count in enumerate(counts) if count.oversold)
        return cls(names, tuple(unknown), oversold, None if night is None else night.name, datetime.now(UTC))

    def faults(self) -> list[str]:
        """One line for each of the first unknown legs, and how many more there are."""
        lines = [
            fault_line(
                ("body", "counts", place, "leg"),
                f"{self.names[place]!r} is no leg of night {self.night}; correct its name, leave it out, or leave out "
                "known_legs_only",
            )
            for place in self.unknown[:FAULTS_TOLD]
        ]
        return lines_told(lines, len(self.unknown))

    def refusal(self) -> str:
        """Why the snapshot is refused as a whole."""
        many = len(self.unknown)
        return f"{counted(many, 'leg')} of the snapshot {'is' if many == 1 else 'are'} unknown, so that none is counted"

    def answer(self, moved: int) -> Counted:
        """Answer to whoever sent the snapshot."""
        return Counted(
            moved=moved,
            unknown_legs=len(self.unknown),
            unknown=[self.names[place] for place in self.unknown[:NAMED]],
            oversold_legs=len(self.oversold),
            oversold=[self.names[place] for place in self.oversold[:NAMED]],
            night=self.night,
        )

    def summary(self) -> LatestCounts:
        """What health tells of it."""
        return LatestCounts(
            at=self.at, legs=len(self.names), unknown_legs=len(self.unknown), oversold_legs=len(self.oversold)
        )
