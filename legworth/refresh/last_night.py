"""Last night as tonight uses it: what it was compared with, prices to start from, and parts to take over."""

from __future__ import annotations

import json
from collections import defaultdict
from collections.abc import Callable
from dataclasses import dataclass, field
from functools import cached_property

import numpy as np
import pandas as pd

from legworth.refresh.part_exchange import KEPT_TABLES, LastPart, Start
from legworth.store import Night, NightDamagedError, Store
from legworth.store.history import IN_FORCE
from legworth.store.manifest import night_number
from network import Network

__all__ = ["LastNight", "sound_night"]


def sound_night(store: Store, told: Callable[[str], None]) -> Night | None:
    """Return the night in force if every file of it is sound, or else the newest sound night before it.

    Parameters
    ----------
    store
        The store.
    told
        Told of every night that is damaged, and why.
    """
    latest = next((entry for entry in reversed(store.history()) if entry.event in IN_FORCE), None)
    least = night_number(latest.night) if latest is not None else None
    candidates = [night for night in store.nights() if least is None or night.number <= least][::-1]
    try:
        night = store.in_force()
    except NightDamagedError as error:
        told(f"{error}; tonight is compared with the newest sound night before it")
    else:
        candidates = ([] if night is None else [night]) + [other for other in candidates if other != night]
        if night is None and not candidates:
            return None
    for night in candidates:
        faults = night.verify()
        if not faults:
            return night
        told(f"night {night.name} is damaged and not used: {faults[0]}")
    if candidates:
        told("no earlier night is sound; tonight is compared with none")
    return None


@dataclass(frozen=True)
class LastNight:
    """A sound night, read as far as tonight needs it."""

    night: Night
    _files: dict[str, set[str]] = field(default_factory=lambda: defaultdict(set))

    def __post_init__(self) -> None:
        for path in self.night.manifest.files:
            folder, _, name = path.rpartition("/")
            self._files[folder].add(name)

    @cached_property
    def _prices(self) -> pd.DataFrame:
        """Prices by name of the leg."""
        night = self.night
        prices = night.table("bid_prices", ["leg", "bid_price"]).to_pandas()
        totals = night.table("leg_totals", ["leg", "mean_demand_price"]).to_pandas()
        found = prices.astype({"leg": "str"}).set_index("leg")[["bid_price"]]
        joined: pd.DataFrame = found.join(totals.astype({"leg": "str"}).set_index("leg")["mean_demand_price"])
        return joined

    def start(self, network: Network) -> Start | None:
        """Prices to start from, zero on legs that are new; None if most are."""
        known = self._prices.reindex(pd.Index(network.legs.name.astype("str")))
        figures = known.to_numpy(dtype=np.float64)
        new = np.isnan(figures).any(axis=1)
        if 2 * int(new.sum()) > len(new):
            return None
        figures[new] = 0.0
        return Start(figures[:, 0].copy(), figures[:, 1].copy())

    def part(self, name: str) -> LastPart | None:
        """The part of that name, None if there was none."""
        folder = f"part={name}"
        files = self._files.get(folder, set())
        entry = self.night.manifest.part.get(name)
        wanted = {f"{table}.parquet" for table in KEPT_TABLES} | {"summary.json"}
        if entry is None or not wanted <= files:
            return None
        place = self.night.folder / folder
        tables = {table: (place / f"{table}.parquet").read_bytes() for table in KEPT_TABLES}
        summary = json.loads((place / "summary.json").read_bytes())
        return LastPart(entry.fingerprints, summary, tables, frozenset(files))
