"""A last night that cannot be read: every file of it, and what says which night is in force."""

from __future__ import annotations

import os
import random
import shutil
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

from benchmarks.faults.campaign import Campaign, Fault, Skip
from benchmarks.faults.ground import TONIGHT, copy_store
from benchmarks.faults.trial import OLD, OLD_STEPS, Trial
from benchmarks.faults.verdict import in_force

__all__ = ["DAMAGE"]

FILES_OF_PART = 15
Harm = Callable[[Path], None]


def _flip(path: Path) -> None:
    data = bytearray(path.read_bytes())
    data[len(data) // 2] ^= 0x20
    path.write_bytes(bytes(data))


def _cut(path: Path) -> None:
    os.truncate(path, path.stat().st_size // 2)


def _empty(path: Path) -> None:
    os.truncate(path, 0)


def _remove(path: Path) -> None:
    path.unlink()


def _into_folder(path: Path) -> None:
    path.unlink()
    path.mkdir()


def _forbid(path: Path) -> None:
    path.chmod(0)


def _writes(data: bytes) -> Harm:
    def write(path: Path) -> None:
        path.write_bytes(data)

    return write


HARMS: dict[str, Harm] = {
    "a bit flipped": _flip,
    "cut to half": _cut,
    "emptied": _empty,
    "removed": _remove,
    "permission taken": _forbid,
    "a folder in its place": _into_folder,
}
GARBAGE: dict[str, Harm] = {
    "not text": _writes(b"\xff\xfe\x00garbage\n"),
    "another document": _writes(b'["night", 7]\n'),
    "an unknown night": _writes(b'{"night": "09999-2030-01-01", "manifest": "' + b"0" * 64 + b'"}\n'),
    "no night": _writes(b'{"night": "../../elsewhere", "manifest": "' + b"0" * 64 + b'"}\n'),
    "deep nonsense": _writes(b"[" * 100_000),
}
SPECIAL = ("in_force", f"nights/night={OLD}/manifest.json", "history.jsonl", "store.json", f"log/{OLD}.jsonl", "lock")


@dataclass(frozen=True)
class _Case:
    """A file of the store, and what happens to it."""

    path: str
    what: str
    harm: Harm


def _case_of_night(store: Path, number: int, shift: int) -> _Case:
    """Take the files of the night in force in turn, and the harms so that a table meets another one in every part."""
    night = store / "nights" / f"night={OLD}"
    paths = [path.relative_to(store).as_posix() for path in sorted(night.rglob("*")) if path.is_file()]
    inside = [path for path in paths if path not in SPECIAL]
    what = list(HARMS)[(number + (number - 1) // FILES_OF_PART + shift) % len(HARMS)]
    return _Case(inside[(number - 1) % len(inside)], what, HARMS[what])


def _cases_of_store() -> list[_Case]:
    harms = {**HARMS, **GARBAGE}
    cases = [_Case(path, what, harm) for path in SPECIAL[:2] for what, harm in harms.items()]
    cases += [_Case(path, what, harms[what]) for path in SPECIAL[2:4] for what in ("not text", "emptied", "removed")]
    cases += [_Case(path, "permission taken", _forbid) for path in (*SPECIAL[2:], "nights")]
    return [*cases, _Case(f"nights/night={OLD}", "removed", shutil.rmtree)]


STORE_CASES = _cases_of_store()


def last_night_unreadable(campaign: Campaign, number: int, of: int, rng: random.Random) -> None:
    """Harm one file of the night in force; all files in turn."""
    case = _case_of_night(campaign.ground.store_after(OLD_STEPS), number, campaign.seed)
    _harmed(campaign, "last-night-unreadable", number, case)


def store_unreadable(campaign: Campaign, number: int, of: int, rng: random.Random) -> None:
    """Harm what says which night is in force, its manifest, the history, and other files of the store."""
    _harmed(campaign, "store-unreadable", number, STORE_CASES[(number - 1) % len(STORE_CASES)])


def _harmed(campaign: Campaign, name: str, number: int, case: _Case) -> None:
    before = _bound_by_permissions() if case.what == "permission taken" else ()
    with campaign.trial(name, number) as trial:
        trial.label = f"{trial.label} ({case.path}: {case.what})"
        target, kept = trial.store / case.path, trial.place / "kept"
        copy_store(trial.store, kept)
        harmed = _harmed_nights(trial.store, case)
        case.harm(target)
        trial.before = before
        trial.read_beside(damaged=True)
        running = trial.start()
        code = trial.ended(running)
        trial.count("moments", "published from what was sound" if code == 0 else "refused, then mended by hand")
        if case.what == "permission taken" and target.exists():
            target.chmod(0o755 if target.is_dir() else 0o644)
        if code == 0:
            trial.harmed = harmed
            _new_must_stand(trial)
        else:
            trial.add("old")
            if code != 2 or (harmed and target.parent != trial.store):
                trial.tell(f"the night ended with {code}: {running.error.strip()[-200:]}")
            trial.put_back(kept)
        trial.next_night()


def _new_must_stand(trial: Trial) -> None:
    """Tonight is in force, compared with the newest night that is sound, with none if none is."""
    sound = sorted(trial.paths.known.keys() - trial.harmed)
    if in_force(trial.store)[0] == OLD:
        trial.tell("exit code 0, and in force is the old night")
        return
    trial.add("new")
    trial.hold_nights(frozenset({TONIGHT}), sound[-1] if sound else None)


def _harmed_nights(store: Path, case: _Case) -> set[str]:
    """Nights that a case harms: also those that share the file, unless it is only taken out of its folder."""
    target, found = store / case.path, set()
    for folder in (store / "nights").iterdir():
        shares = target.is_file() and any(path.samefile(target) for path in folder.rglob(target.name))
        alone = case.what in ("removed", "a folder in its place")
        if target in (folder, folder.parent) or target.is_relative_to(folder) or (shares and not alone):
            found.add(folder.name.removeprefix("night="))
    return found


def _bound_by_permissions() -> tuple[str, ...]:
    """Return what to put before a command so that permissions bind it, be it run by root."""
    if os.geteuid() != 0:
        return ()
    if shutil.which("setpriv") is None:
        raise Skip("permissions do not bind root, and there is no setpriv to take that from it")
    powers = "-dac_override,-dac_read_search"
    return ("setpriv", "--bounding-set", powers, "--inh-caps", powers)


DAMAGE = {
    "last-night-unreadable": Fault("a file of the last night harmed", last_night_unreadable, lambda n: n // 3),
    "store-unreadable": Fault(
        "what says which night is in force, its manifest, the history or the store harmed",
        store_unreadable,
        lambda n: min(n // 5, len(STORE_CASES)),
    ),
}
