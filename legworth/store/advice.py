"""What to do where a night asked for is not there, or none is in force."""

from __future__ import annotations

from typing import TYPE_CHECKING

from legworth.store.history import IN_FORCE
from legworth.store.stopped import read_stopped
from network.errors import NightDamagedError, StoreError

if TYPE_CHECKING:
    from legworth.store.store import Store

__all__ = ["absent_night", "no_night_in_force", "way_back"]


def absent_night(store: Store, name: str) -> StoreError:
    """Say why the store has no night of a name, as far as it knows, or which nights it has."""
    for path in store.stopped():
        if path.stem == name:
            why = read_stopped(path).why()
            return StoreError(f"night {name} was stopped by a check and not published ({why}); read {path}")
    told = [entry for entry in store.history() if entry.night == name]
    last = told[-1] if told else None
    if last is not None and last.event == "thin":
        why = f" ({last.reason})" if last.reason else ""
        return StoreError(f"night {name} was removed by thinning on {last.at:%Y-%m-%d} by {last.who}{why}")
    if last is not None and last.event in IN_FORCE:
        return NightDamagedError(f"night {name} was published, and its folder is gone; restore it from a backup")
    log = store.path / "log" / f"{name}.jsonl"
    if log.exists():
        return StoreError(f"night {name} was begun and not published; what happened is in {log}")
    known = ", ".join([night.name for night in store.nights()][-10:]) or "none yet"
    return StoreError(f"{store.path} has no night {name!r}; its latest are: {known}")


def no_night_in_force(store: Store) -> StoreError:
    """Say that no night is in force, and how to have one."""
    if not store.nights():
        return StoreError(f"no night is in force in {store.path}; run `legworth refresh`")
    return NightDamagedError(f"no night is in force in {store.path}, which holds some; {way_back(store)}")


def way_back(store: Store) -> str:
    """Say how to put a night back in force: the one that was so last, or the newest if that one is not sound.

    Sound is what looks so by names and lengths; restoring reads all of it.
    """
    whole = [night.name for night in store.nights() if not night.quick_faults()]
    if not whole:
        return "none of them is sound; restore one from a backup, or run `legworth refresh`"
    last = _last_in_force(store)
    name, which = (last, "the one last in force") if last in whole else (whole[-1], "the newest sound one")
    return f"put {which} back with `legworth nights --store {store.path} restore {name} --reason WHY`"


def _last_in_force(store: Store) -> str | None:
    """Night that was in force last by the history."""
    told: list[str] = []
    for entry in store.history():
        if entry.event in IN_FORCE:
            told.append(entry.night)
        elif entry.event == "withdrawn" and told[-1:] == [entry.night]:
            told.pop()
    return told[-1] if told else None
