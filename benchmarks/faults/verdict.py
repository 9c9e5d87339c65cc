"""The verdict on a store: what is wrong with it, by code of its own that reads files and hashes."""

from __future__ import annotations

import json
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from benchmarks.faults.ground import AT_REST, Ground, Step, essence, sha256
from legworth.store import Store

__all__ = ["Paths", "history_faults", "in_force", "leftovers", "night_faults"]

KEPT = 2


@dataclass
class Paths:
    """The nights of a store that are known, each by the steps that led to it.

    Attributes
    ----------
    known
        Steps by name of the night.
    spare
        Whether the report of nights that are placed from now on may know less than an undisturbed one, because their
        solver was harmed: it must not keep certified prices from the desk.
    """

    known: dict[str, tuple[Step, ...]] = field(default_factory=dict)
    spare: bool = False
    _spared: set[str] = field(default_factory=set)

    def place(self, ground: Ground, folder: Path, states: frozenset[str], before: str | None) -> list[str]:
        """Compare a night with what an undisturbed night gives, and remember it.

        Parameters
        ----------
        ground
            What the campaign stands on.
        folder
            Folder of the night.
        states
            States of the tables that it may have been made from.
        before
            Night that it must have been compared with; None for any known one or none.
        """
        manifest = json.loads((folder / "manifest.json").read_bytes())
        name = manifest["night"]
        if name not in self.known:
            state = ground.state_of(manifest["inputs"])
            if state not in states:
                return [f"night {name} is made from {state or 'tables that were never there together'}"]
            compared = manifest["before"]
            if compared != before and not (before is None and (compared is None or compared in self.known)):
                return [f"night {name} was compared with {compared}, not with {before}"]
            steps = self.known[compared] if compared is not None else ()
            self.known[name] = (*steps, Step(state, _mended(folder, manifest)))
            if self.spare:
                self._spared.add(name)
        found = essence(folder).differences(ground.expected(self.known[name]))
        return [line for line in found if name not in self._spared or not line.startswith("changes.json")]


def _mended(folder: Path, manifest: dict[str, Any]) -> frozenset[str]:
    """Parts that the other solver priced this night."""
    solved = [str(part["name"]) for part in manifest["parts"] if part["taken_over_from"] is None]
    return frozenset(
        part
        for part in solved
        if json.loads((folder / f"part={part}" / "summary.json").read_bytes())["solver"].startswith("highs")
    )


def night_faults(folder: Path, expected: str | None = None) -> list[str]:
    """Say what is wrong with a night: its manifest, every file, every certificate."""
    try:
        data = (folder / "manifest.json").read_bytes()
        manifest = json.loads(data)
    except (OSError, ValueError) as error:
        return [f"{folder.name}: no manifest ({error})"]
    faults = []
    if expected is not None and sha256(data) != expected:
        faults.append(f"{folder.name}: the manifest is not the one published")
    for path, entry in manifest["files"].items():
        try:
            content = (folder / path).read_bytes()
        except OSError as error:
            faults.append(f"{folder.name}: {path} cannot be read ({error.strerror})")
            continue
        if (sha256(content), len(content)) != (entry["sha256"], entry["bytes"]):
            faults.append(f"{folder.name}: {path} is not what the manifest says")
    there = {path.relative_to(folder).as_posix() for path in folder.rglob("*") if path.is_file()}
    strangers = there - {"manifest.json", *manifest["files"]}
    faults += [f"{folder.name}: {path} is not in the manifest" for path in strangers]
    for part in manifest["parts"]:
        proofs = part["certificate"]
        if proofs.keys() != {"bid_prices", "mean_demand"} or not all(proof["holds"] for proof in proofs.values()):
            faults.append(f"{folder.name}: part {part['name']} has no certificate that holds")
    if not (folder / "changes.html").exists() or not (folder / "changes.json").exists():
        faults.append(f"{folder.name}: there is no report of what moved")
    return faults


def in_force(store: Path) -> tuple[str, str]:
    """Name of the night in force, and the SHA-256 of its manifest.

    Raises
    ------
    OSError, ValueError, KeyError
        If nothing says so.
    """
    said = json.loads((store / "in_force").read_bytes())
    return said["night"], said["manifest"]


def history_faults(store: Path) -> list[str]:
    """Say where history and what is in force do not agree, once nothing is left to be settled."""
    events = [json.loads(line) for line in (store / "history.jsonl").read_bytes().splitlines()]
    standing: list[dict[str, str]] = []
    for event in events:
        if event["event"] in ("publish", "force", "restore"):
            standing.append(event)
        elif event["event"] == "withdrawn":
            standing.pop()
    last = (standing[-1]["night"], standing[-1]["manifest"])
    return [] if last == in_force(store) else [f"the history ends with {last[0]}, in force is {in_force(store)[0]}"]


def leftovers(store: Path, temporary: Path, folder: Path, files: frozenset[str]) -> list[str]:
    """Say what a fault has left behind: in the store, among temporary files, in the network folder."""
    found = [f"{name} in the store" for name in sorted({path.name for path in store.iterdir()} - AT_REST)]
    found += [f"{path.relative_to(store)}" for path in (store / "aside").iterdir()]
    found += [f"{path.relative_to(store)}" for path in store.rglob("*.new")]
    found += [f"temporary {path.relative_to(temporary)}" for path in temporary.rglob("*")]
    found += [f"{path.name} in the network folder" for path in folder.iterdir() if path.name not in files]
    nights = [night.name for night in Store.open(store).nights()]
    if len(nights) > KEPT:
        found.append(f"nights {', '.join(nights)}, though the rule keeps {KEPT}")
    return [f"left over: {what}" for what in found]
