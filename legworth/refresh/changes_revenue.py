"""Revenue still to come, tonight against last night, on the departures that both nights sell.

The revenue of a part is the optimum of its program. A part is compared like for like if it sells the same departures
both nights; one that lost or gained a departure is told apart. Seats sold in between moved from revenue to come into
revenue booked, which the tables do not hold; what they brought is put at last night's bid prices, which is the least
that network control would have taken for them.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd

from legworth.refresh.changes_legs import LegMatch, NightLegs

__all__ = ["PartRevenue", "RevenueChanges", "revenue_changes"]


@dataclass(frozen=True)
class PartRevenue:
    """A part sold both nights.

    Attributes
    ----------
    part
        Its name.
    departures
        Departures on sale.
    then, now
        Revenue to come, currency.
    seats_sold
        Seats sold since last night, less those that came back.
    sold_worth
        These seats at last night's bid prices, currency.
    """

    part: str
    departures: int
    then: float
    now: float
    seats_sold: int
    sold_worth: float

    @property
    def change(self) -> float:
        """Revenue to come tonight less last night's, currency."""
        return self.now - self.then


@dataclass(frozen=True)
class RevenueChanges:
    """Revenue still to come, currency.

    Attributes
    ----------
    tonight, last
        All parts of the night; None for last night on the first, or where a night does not say it.
    parts, departures
        Parts and departures compared like for like.
    then, now
        Revenue of these.
    seats_sold, sold_worth
        Seats sold on these since last night, and what they are worth at last night's bid prices.
    apart
        Parts of tonight that cannot be compared like for like, because their departures differ.
    most
        Parts compared whose revenue moved most, most first.
    """

    tonight: float | None
    last: float | None
    parts: int
    departures: int
    then: float
    now: float
    seats_sold: int
    sold_worth: float
    apart: int
    most: tuple[PartRevenue, ...]

    @property
    def change(self) -> float:
        """Revenue to come tonight less last night's, like for like, currency."""
        return self.now - self.then


def revenue_changes(
    revenue: dict[str, float | None],
    revenue_last: dict[str, float | None],
    nights: tuple[NightLegs, NightLegs] | None,
    match: LegMatch | None,
    top: int,
) -> RevenueChanges:
    """Compare revenue to come.

    Parameters
    ----------
    revenue, revenue_last
        Optimum of every part, tonight and last night, currency; None where it is not known.
    nights, match
        Legs of tonight and of last night, and those that both sell; None on the first night.
    top
        Longest list to give.
    """
    tonight, last = _total(revenue), _total(revenue_last)
    if nights is None or match is None:
        return RevenueChanges(tonight, None, 0, 0, 0.0, 0.0, 0, 0.0, 0, ())
    now, then = nights
    matched = _matched_parts(now, then, match)
    on_sale, on_sale_last = (_count(night.part[~night.departed]) for night in nights)
    found = []
    for part, row in matched.iterrows():
        name, count = str(part), int(row["departures"])
        before, after = revenue_last.get(name), revenue.get(name)
        alike = count == on_sale.get(name, 0) == on_sale_last.get(name, 0)
        if alike and before is not None and after is not None:
            found.append(PartRevenue(name, count, before, after, int(row["sold"]), float(row["worth"])))
    most = sorted((line for line in found if line.change != 0), key=lambda line: (-abs(line.change), line.part))
    return RevenueChanges(
        tonight=tonight,
        last=last,
        parts=len(found),
        departures=sum(line.departures for line in found),
        then=sum(line.then for line in found),
        now=sum(line.now for line in found),
        seats_sold=sum(line.seats_sold for line in found),
        sold_worth=sum(line.sold_worth for line in found),
        apart=len(revenue) - len(found),
        most=tuple(most[:top]),
    )


def _matched_parts(now: NightLegs, then: NightLegs, match: LegMatch) -> pd.DataFrame:
    """Departures on sale both nights in the parts of one name, the seats sold since, and their worth, by part."""
    sold = now.sold[match.now] - then.sold[match.then]
    frame = pd.DataFrame(
        {
            "part": now.part[match.now],
            "departures": 1,
            "sold": sold,
            "worth": sold * then.bid_price[match.then],
        }
    )
    same = now.part[match.now] == then.part[match.then]
    found: pd.DataFrame = frame[same].groupby("part", sort=True).sum()
    return found


def _count(names: np.ndarray) -> dict[str, int]:
    return {str(name): int(count) for name, count in pd.Series(names).value_counts().items()}


def _total(revenue: dict[str, float | None]) -> float | None:
    known = [value for value in revenue.values() if value is not None]
    return sum(known) if known and len(known) == len(revenue) else None
