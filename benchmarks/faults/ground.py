"""What the campaign stands on: three states of the tables, a store to start from, and the nights to expect.

The tables are the first two days of the demo network in four parts. From one state to the next a leg of the first
part has a seat more sold, an itinerary of the third has more demand, and the snapshot is a day younger, so that a
night solves two parts, takes two over, and computes every price curve anew. The store to start from holds the nights
of the first two states; the rule of the tables keeps two nights, so that every night also removes one.

What a night must contain follows from the nights before it. `Ground.expected` makes it once, undisturbed, in this
process, and certifies every part of it again from its stored tables alone.
"""

from __future__ import annotations

import hashlib
import io
import json
import subprocess
import threading
import uuid
from collections.abc import Mapping
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import pandas as pd
import pyarrow.parquet as pq

from legworth.refresh import PartInput, PartOutput, cut_parts, run_part
from legworth.refresh.proof import Proof, certify_again
from lp import LpOptions
from network import read_folder
from tests.legworth.refresh.nights import make

__all__ = [
    "AT_REST",
    "BEFORE",
    "FIRST",
    "ROOT",
    "TONIGHT",
    "Essence",
    "Ground",
    "Step",
    "copy_store",
    "essence",
    "sha256",
]

ROOT = Path(__file__).parents[2]
FIRST, BEFORE, TONIGHT = "first", "before", "tonight"
AT_REST = frozenset({"store.json", "in_force", "nights", "aside", "stopped", "log", "history.jsonl", "lock"})
"""Names that a store may hold while nobody works on it."""

DAYS = ("2027-03-01", "2027-03-02")
AS_OF = {FIRST: "2027-02-25", BEFORE: "2027-02-26", TONIGHT: "2027-02-27"}
RULES = """
[store]
keep_newest = 2
keep_weeks = 0
keep_months = 0

[refresh]
part_seconds = {seconds}
"""
PART_SECONDS = 120
VARYING = ("network.toml", "legs.csv", "demand.csv")

Files = dict[str, bytes]
LEFT_OUT = ("number", "published", "files", "inputs")
"""Fields of a manifest that are not compared as they are: files are compared one by one, inputs known by their hash."""


@dataclass(frozen=True)
class Step:
    """One night on the way to another: the state of the tables, and the parts that the other solver had to mend."""

    state: str
    mended: frozenset[str] = frozenset()


@dataclass(frozen=True)
class Essence:
    """What two undisturbed nights of the same tables after the same nights have in common.

    Attributes
    ----------
    files
        SHA-256 by path of every file in the folders of the parts.
    manifest, changes
        The manifest and ``changes.json`` without names of nights, instants and seconds.
    """

    files: dict[str, str]
    manifest: dict[str, Any]
    changes: dict[str, Any]

    def differences(self, other: Essence) -> list[str]:
        """Say where two essences differ."""
        found = [
            f"{path} is not what an undisturbed night gives"
            for path in sorted({*self.files, *other.files})
            if self.files.get(path) != other.files.get(path)
        ]
        for name in ("manifest", "changes"):
            mine, others = getattr(self, name), getattr(other, name)
            found += [
                f"{name}.json: {key} is not what an undisturbed night gives"
                for key in sorted({*mine, *others})
                if mine.get(key) != others.get(key)
            ]
        return found


def sha256(data: bytes) -> str:
    """SHA-256 in hexadecimal."""
    return hashlib.sha256(data).hexdigest()


def copy_store(source: Path, target: Path) -> None:
    """Copy a store with the hard links between its nights."""
    target.parent.mkdir(parents=True, exist_ok=True)
    subprocess.run(["cp", "-a", str(source), str(target)], check=True)


def essence(folder: Path) -> Essence:
    """Read the essence of a night from its folder."""
    text = (folder / "manifest.json").read_text()
    manifest = json.loads(text)
    names = {manifest["night"]: "TONIGHT", manifest["before"] or "NO NIGHT": "LAST"}
    files = {path.relative_to(folder).as_posix(): sha256(path.read_bytes()) for path in sorted(folder.glob("part=*/*"))}
    changes: dict[str, Any] = {}
    if (folder / "changes.json").exists():
        changes = json.loads((folder / "changes.json").read_bytes())
    timeless = {name: value for name, value in manifest.items() if name not in LEFT_OUT}
    return Essence(files, _timeless(timeless, names), _timeless(changes, names))


def _timeless(value: Any, names: Mapping[str, str]) -> Any:
    """Leave out what is measured by a clock, and give nights the names of their roles."""
    if isinstance(value, dict):
        return {
            key: _timeless(inner, names) for key, inner in value.items() if "seconds" not in key and key != "slowest"
        }
    if isinstance(value, list):
        return [_timeless(inner, names) for inner in value]
    return names.get(value, value) if isinstance(value, str) else value


class Ground:
    """Tables, the store to start from, and the nights to expect.

    Parameters
    ----------
    scratch
        An empty folder.

    Attributes
    ----------
    mark
        What the environment of every process of this campaign carries.
    states
        Files by name, by state.
    """

    def __init__(self, scratch: Path) -> None:
        self.scratch = scratch
        self.mark = uuid.uuid4().hex
        self.states: dict[str, Files] = _states()
        for file in VARYING:
            self.states[f"tonight but {file}"] = {**self.states[TONIGHT], file: self.states[BEFORE][file]}
        self._known = {self._hashes(files): name for name, files in self.states.items()}
        self._made: dict[tuple[Step, ...], tuple[Path, Essence]] = {}
        self._making = threading.Lock()

    @property
    def parts(self) -> tuple[str, ...]:
        """Names of the parts of tonight."""
        return tuple(sorted({path.partition("/")[0][5:] for path in self.expected((Step(TONIGHT),)).files}))

    def write(self, state: str, folder: Path, part_seconds: int | None = None) -> Path:
        """Write a network folder in one of the states."""
        folder.mkdir(parents=True, exist_ok=True)
        for name, data in self.states[state].items():
            (folder / name).write_bytes(data)
        if part_seconds is not None:
            toml = self.states[state]["network.toml"].decode()
            changed = toml.replace(f"part_seconds = {PART_SECONDS}", f"part_seconds = {part_seconds}").encode()
            (folder / "network.toml").write_bytes(changed)
            self._known[self._hashes({**self.states[state], "network.toml": changed})] = state
        return folder

    def state_of(self, inputs: Mapping[str, Mapping[str, Any]]) -> str | None:
        """Return the state whose tables a manifest names as its inputs; None if they were never there together."""
        return self._known.get(frozenset((name, entry["sha256"]) for name, entry in inputs.items()))

    def expected(self, steps: tuple[Step, ...]) -> Essence:
        """Essence of the last of some nights made one after the other without any fault."""
        with self._making:
            return self._make(steps)[1]

    def store_after(self, steps: tuple[Step, ...]) -> Path:
        """Return a store of these nights, to be copied."""
        with self._making:
            return self._make(steps)[0]

    def make(self, folder: Path, store: Path) -> None:
        """Make a night in this process, as the command would."""
        with self._making:
            make(folder, store)

    def _make(self, steps: tuple[Step, ...]) -> tuple[Path, Essence]:
        if steps in self._made:
            return self._made[steps]
        place = self.scratch / "expected" / str(len(self._made) + 1)
        *before, last = steps
        if before:
            before_made = self._make(tuple(before))[0]
            place = self.scratch / "expected" / str(len(self._made) + 1)
            copy_store(before_made, place / "store")
        folder = self.write(last.state, place / "folder")
        night = make(folder, place / "store", task=OtherSolver(last.mended)).night
        for part in sorted(night.folder.glob("part=*")):
            _certify(part)
        self._made[steps] = (place / "store", essence(night.folder))
        return self._made[steps]

    @staticmethod
    def _hashes(files: Files) -> frozenset[tuple[str, str]]:
        return frozenset((name, sha256(data)) for name, data in files.items())


@dataclass(frozen=True)
class OtherSolver:
    """Prices some parts by the other solver, as a night does where the first one failed."""

    parts: frozenset[str]

    def __call__(self, part: PartInput) -> PartOutput:
        """Price one part."""
        return run_part(replace(part, solver="highs") if part.name in self.parts else part)


def _certify(part: Path) -> None:
    """Prove the optimum of a part from its stored tables."""
    network = read_folder(part).network
    prices, proof = pq.read_table(part / "bid_prices.parquet"), pq.read_table(part / "proof.parquet")
    stored = Proof(*(t[c].to_numpy() for t, c in ((proof, "allotted"), (prices, "bid_price"), (prices, "next_seat"))))
    if certify_again(network, stored, LpOptions()) is None:
        raise AssertionError(f"{part}: the stored prices are not certified by the stored tables")


def _states() -> dict[str, Files]:
    """Tables of the three states."""
    demo = ROOT / "demo_network"
    tables = {name: _text_table((demo / f"{name}.csv").read_bytes()) for name in ("legs", "itineraries")}
    legs = tables["legs"][tables["legs"]["departs"].str[:10].isin(DAYS)]
    inside = tables["itineraries"]["legs"].map(lambda path: set(path.split()) <= set(legs["leg"]))
    itineraries = tables["itineraries"][inside]
    plain = {name: (demo / name).read_bytes() for name in ("stations.csv", "booking_curves.csv")}
    for name in ("fares", "demand"):
        table = _text_table((demo / f"{name}.csv").read_bytes())
        plain[f"{name}.csv"] = _csv(table[table["itinerary"].isin(itineraries["itinerary"])])
    plain |= {"legs.csv": _csv(legs), "itineraries.csv": _csv(itineraries)}
    toml = (demo / "network.toml").read_text() + RULES.format(seconds=PART_SECONDS)
    demand = _text_table(plain["demand.csv"])
    sold = legs.index[legs["sold"].astype(int) < legs["capacity"].astype(int) - len(AS_OF)][0]
    wanted = demand.index[demand["itinerary"].str.contains("-0302-")][0]
    found: dict[str, Files] = {}
    for step, (state, day) in enumerate(AS_OF.items()):
        legs_now, demand_now = legs.copy(), demand.copy()
        legs_now.loc[sold, "sold"] = str(int(legs.loc[sold, "sold"]) + step)
        demand_now.loc[wanted, "mean"] = f"{float(demand.loc[wanted, 'mean']) + step / 4:.3f}"
        found[state] = {
            **plain,
            "legs.csv": _csv(legs_now),
            "demand.csv": _csv(demand_now),
            "network.toml": toml.replace("2027-02-26T", f"{day}T").encode(),
        }
    return found


def _text_table(data: bytes) -> pd.DataFrame:
    return pd.read_csv(io.BytesIO(data), dtype=str, keep_default_na=False)


def _csv(table: pd.DataFrame) -> bytes:
    return table.to_csv(index=False, lineterminator="\n").encode()


def check_states(ground: Ground, scratch: Path) -> None:
    """Make sure that tonight is what the campaign needs: four parts, two solved and two taken over."""
    folder = ground.write(TONIGHT, scratch)
    parts = cut_parts(read_folder(folder).network)
    night = ground.expected((Step(FIRST), Step(BEFORE), Step(TONIGHT)))
    solved = [part["taken_over_from"] is None for part in night.manifest["parts"]]
    if len(parts) != 4 or sum(solved) != 2:
        raise AssertionError(f"{len(parts)} parts, {sum(solved)} of them solved: not what the campaign needs")
