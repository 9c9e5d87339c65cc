"""Two nights of the store beside each other: prices that moved, legs added and gone, revenue like for like."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd

from legworth.store.night import Night
from network.errors import StoreError

__all__ = ["NightComparison", "compare_nights"]

LIFTED = 1e-6
"""Share of the greater of two prices within which they count as the same: that of the certificates."""


@dataclass(frozen=True, eq=False)
class NightComparison:
    """What differs between two nights.

    Attributes
    ----------
    before, after
        Names of the nights.
    currency
        Currency of both; None where neither says.
    legs
        Legs that both have and that had not departed by the later snapshot.
    moved
        Bid prices of these legs that moved: ``leg``, ``part``, ``before``, ``after``, ``difference`` (currency a seat),
        ``remaining_before``, ``remaining_after`` (seats); greatest move first.
    added
        Legs of the later night alone, sorted.
    departed, gone
        Sorted: legs of the earlier night that departed by the later snapshot, whether the later night still has them
        or not; and the other legs of the earlier night alone.
    parts
        Parts whose expected revenue both nights know.
    revenue_before, revenue_after
        Revenue that these parts expected to come, currency; None if there is no such part.
    """

    before: str
    after: str
    currency: str | None
    legs: int
    moved: pd.DataFrame
    added: tuple[str, ...]
    departed: tuple[str, ...]
    gone: tuple[str, ...]
    parts: int
    revenue_before: float | None
    revenue_after: float | None

    def as_dict(self, top: int) -> dict[str, Any]:
        """Plain record, with the ``top`` greatest moves."""
        return {
            "before": self.before,
            "after": self.after,
            "currency": self.currency,
            "legs_in_both": self.legs,
            "legs_moved": len(self.moved),
            "moved": self.moved.head(top).to_dict(orient="records"),
            "added": list(self.added),
            "departed": list(self.departed),
            "gone": list(self.gone),
            "parts_like_for_like": self.parts,
            "revenue_before": self.revenue_before,
            "revenue_after": self.revenue_after,
        }


def compare_nights(before: Night, after: Night) -> NightComparison:
    """Set two nights beside each other, leg by leg.

    Raises
    ------
    StoreError
        If they are the same night, of two currencies, or one has no bid prices.
    NightDamagedError
        If one cannot be read.
    """
    if before.name == after.name:
        raise StoreError(f"{before.name} is given twice; name two nights")
    if before.currency and after.currency and before.currency != after.currency:
        raise StoreError(
            f"{before.name} is priced in {before.currency} and {after.name} in {after.currency}; "
            "name two nights of one currency"
        )
    old, new = _prices(before), _prices(after)
    left = _left(before, after)
    both = old.merge(new, on="leg", suffixes=("_before", "_after"))
    both = both[~both["leg"].isin(left)]
    price_before, price_after = both["bid_price_before"].to_numpy(), both["bid_price_after"].to_numpy()
    moves = price_after - price_before
    moved = np.abs(moves) > LIFTED * np.maximum(np.abs(price_before), np.abs(price_after))
    order = np.flatnonzero(moved)[np.argsort(-np.abs(moves[moved]), kind="stable")]
    lost = set(old["leg"]) - set(new["leg"])
    departed = set(old["leg"]) & left
    known = [part for part in sorted(set(before.parts()) & set(after.parts())) if _objectives(before, after, part)]
    return NightComparison(
        before=before.name,
        after=after.name,
        currency=after.currency or before.currency,
        legs=len(both),
        moved=pd.DataFrame(
            {
                "leg": both["leg"],
                "part": both["part_after"],
                "before": price_before,
                "after": price_after,
                "difference": moves,
                "remaining_before": both["remaining_before"],
                "remaining_after": both["remaining_after"],
            }
        )
        .iloc[order]
        .reset_index(drop=True),
        added=tuple(sorted(new.loc[~new["leg"].isin(old["leg"]), "leg"])),
        departed=tuple(sorted(departed)),
        gone=tuple(sorted(lost - departed)),
        parts=len(known),
        revenue_before=sum(_objective(before, part) for part in known) if known else None,
        revenue_after=sum(_objective(after, part) for part in known) if known else None,
    )


def _prices(night: Night) -> pd.DataFrame:
    frame: pd.DataFrame = night.table("bid_prices", ["leg", "bid_price", "remaining"]).to_pandas()
    return frame.assign(leg=frame["leg"].astype("str"), part=frame["part"].astype("str"))


def _left(before: Night, after: Night) -> set[str]:
    """Legs that had departed by the later of two snapshots, by the times of the second night, else of the first."""
    departs: dict[str, pd.Timestamp] = {}
    for night in (before, after):
        if "legs" in night.manifest.rows:
            legs = night.table("legs", ["leg", "departs"]).to_pandas()
            instants = pd.to_datetime(legs["departs"], utc=True, format="ISO8601")
            departs |= dict(zip(legs["leg"].astype("str"), instants, strict=True))
    moment = max(before.manifest.as_of, after.manifest.as_of)
    return {leg for leg, instant in departs.items() if instant <= moment}


def _objective(night: Night, part: str) -> float:
    return night.manifest.part[part].objective or 0.0


def _objectives(before: Night, after: Night, part: str) -> bool:
    return all(night.manifest.part[part].objective is not None for night in (before, after))
