"""The store of nights: what is in force, what was, and how a night gets in."""

from __future__ import annotations

import json
import re
import shutil
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from dataclasses import replace
from datetime import datetime
from pathlib import Path
from typing import TYPE_CHECKING

import filelock

from legworth.store.advice import absent_night
from legworth.store.disk import digest, one_line_errors, replace_file, sync
from legworth.store.history import IN_FORCE, HistoryEntry, append_entry, read_history
from legworth.store.layout import ROOMS, open_folder
from legworth.store.manifest import Manifest, night_name, night_number
from legworth.store.night import MANIFEST, Night
from legworth.store.sql import connect
from legworth.store.thinning import Thinning, reasons_to_keep
from legworth.store.unfinished import UnfinishedNight
from network.errors import NightDamagedError, StoreBusyError, StoreError
from network.store_settings import StoreSettings

if TYPE_CHECKING:
    import duckdb

__all__ = ["Store"]

MARK, NIGHT = "in_force", "night="


class Store:
    """A store of nights in a folder. `Store.open` makes it.

    Readers need no lock: a night never changes once it stands in the store, and which one is in force is said by
    one small file that is only ever replaced as a whole.

    Attributes
    ----------
    path
        The folder.
    """

    def __init__(self, path: Path | str) -> None:
        self.path = Path(path)
        self._lock = filelock.FileLock(self.path / "lock", timeout=0)
        self._open: Path | None = None

    @classmethod
    def open(cls, path: Path | str, create: bool = False) -> Store:
        """Open a store, or make one in a folder that is empty or not there yet.

        Raises
        ------
        StoreError
            If the folder is no store, one of another layout, or cannot be read or made.
        """
        path = Path(path)
        with one_line_errors(path, "open"):
            open_folder(path, create=create)
        return cls(path)

    @property
    def history_file(self) -> Path:
        """The history of the store."""
        return self.path / "history.jsonl"

    def history(self) -> tuple[HistoryEntry, ...]:
        """Who put which night in force, when and why, oldest first."""
        with one_line_errors(self.history_file, "read"):
            return read_history(self.history_file)

    @contextmanager
    def lock(self) -> Iterator[None]:
        """Hold the store, so that nobody else changes it; the system frees it when the process ends, however it ends.

        Raises
        ------
        StoreBusyError
            At once, if another process or thread holds it.
        """
        with one_line_errors(self.path / "lock", "lock"):
            try:
                self._lock.acquire()
            except filelock.Timeout:
                raise StoreBusyError(
                    f"another process is putting a night into {self.path}; wait until it has ended"
                ) from None
        try:
            yield
        finally:
            self._lock.release()

    @contextmanager
    def begin(self, as_of: datetime) -> Iterator[UnfinishedNight]:
        """Begin a night: take the lock, clear what crashed processes left, and give a folder to write into.

        Whatever happens inside, nothing of the night remains unless `UnfinishedNight.publish` was reached.

        Parameters
        ----------
        as_of
            Instant of the snapshot, with offset; its local date goes into the name.

        Raises
        ------
        StoreBusyError
            If another process holds the store.
        StoreError
            If the store cannot be written.
        """
        with self.lock():
            with one_line_errors(self.path, "write to"):
                number = self._next_number()
                self._settle()
                name = night_name(number, as_of)
                folder = self.path / "aside" / name
                folder.mkdir()
            night = UnfinishedNight(name, number, folder, self.path, self._finish)
            self._open = folder
            try:
                yield night
            finally:
                self._open = None
                night.discard()

    def in_force(self) -> Night | None:
        """Return the night in force, None while there is none.

        Its manifest is the one that was published, and all its files are there at full length; `Night.verify`
        reads them too. The caller keeps this night, whatever is published meanwhile.

        Raises
        ------
        NightDamagedError
            If the night in force is missing or damaged; `nights` may have a sound one.
        """
        mark = self._mark()
        while mark is not None:
            try:
                return self._resolve(mark)
            except NightDamagedError:
                again = self._mark()
                if again == mark:
                    raise
                mark = again
        return None

    def nights(self) -> tuple[Night, ...]:
        """All nights, oldest first, sound or not."""
        expected = {entry.night: entry.manifest for entry in self.history() if entry.manifest}
        with one_line_errors(self.path / "nights", "read"):
            names = self._names("nights")
        return tuple(
            Night(name, self._folder(name), expected.get(name))
            for name in sorted(names, key=lambda n: night_number(n) or 0)
        )

    def stopped(self) -> tuple[Path, ...]:
        """What to look at first of every night that a check stopped, oldest first."""
        with one_line_errors(self.path / "stopped", "read"):
            found = [path for path in (self.path / "stopped").glob("*.json") if night_number(path.stem) is not None]
        return tuple(sorted(found, key=lambda path: night_number(path.stem) or 0))

    def night(self, name: str) -> Night:
        """Return the night of that name.

        Raises
        ------
        StoreError
            If there is none; says what became of it, or names those there are.
        """
        nights = {night.name: night for night in self.nights()}
        if name not in nights:
            raise absent_night(self, name)
        return nights[name]

    def restore(self, name: str, who: str, reason: str) -> Night:
        """Put an earlier night back in force, once every file of it has been verified.

        Parameters
        ----------
        name
            The night.
        who, reason
            Go into the history.

        Raises
        ------
        NightDamagedError
            If the night is not sound.
        StoreError
            If there is no such night, no reason is given, or the store cannot be written.
        """
        if not reason.strip():
            raise StoreError("a night is put back in force for a reason; give one")
        with self.lock():
            night = self.night(name)
            faults = night.verify()
            if faults:
                raise NightDamagedError(f"night {name} is damaged and cannot be put in force: {'; '.join(faults[:3])}")
            with one_line_errors(self.path, "write to"):
                self._settle()
                manifest = (night.folder / MANIFEST).read_bytes()
                self._put_in_force(night, manifest, HistoryEntry.now("restore", name, digest(manifest), who, reason))
        return replace(night, expected=digest(manifest))

    def thinning(self, rule: StoreSettings) -> Thinning:
        """Say what `thin` would do now; it needs no lock and changes nothing.

        Raises
        ------
        NightDamagedError
            If nobody can tell which night is in force.
        """
        nights = {night.name: night for night in self.nights()}
        kept = reasons_to_keep(list(nights), rule)
        mark = self._mark()
        if mark is not None:
            in_force = self._said(mark)[0]
            before = self._before(in_force, nights)
            kept |= {} if before is None else {before: "the night before the one in force"}
            kept |= {in_force: "in force"} if in_force in nights else {}
        return Thinning(
            {name: kept[name] for name in nights if name in kept}, tuple(name for name in nights if name not in kept)
        )

    def thin(self, rule: StoreSettings, reason: str | None = None) -> tuple[str, ...]:
        """Remove the nights that the rule does not keep; never the one in force, the one before it, nor the newest.

        The one before is that which the night in force was compared with. Files that a later night shares by hard
        link stay with it.

        Parameters
        ----------
        rule
            How many nights are kept.
        reason
            Goes into the history beside the user's name.

        Returns
        -------
        tuple of str
            Names of the nights removed, oldest first.

        Raises
        ------
        StoreBusyError
            If another process holds the store.
        NightDamagedError
            If nobody can tell which night is in force; nothing is removed.
        """
        with self.lock():
            gone = self.thinning(rule).gone
            with one_line_errors(self.path, "write to"):
                for name in gone:
                    append_entry(self.history_file, HistoryEntry.now("thin", name, None, reason=reason))
                    aside = self.path / "aside" / f"thinned-{name}"
                    self._folder(name).rename(aside)
                    shutil.rmtree(aside, ignore_errors=True)
                if gone:
                    sync(self.path / "nights")
        return gone

    def _before(self, in_force: str, nights: Mapping[str, Night]) -> str | None:
        """The night that the one in force was compared with; where that cannot be told, the next earlier one."""
        try:
            before = nights[in_force].manifest.before
            if before is None or before in nights:
                return before
        except (KeyError, NightDamagedError):
            pass
        number = night_number(in_force) or 0
        return next((name for name in reversed(list(nights)) if (night_number(name) or 0) < number), None)

    def sql(self) -> duckdb.DuckDBPyConnection:
        """Open a DuckDB connection with a view per table over all nights; see `legworth.store.sql`."""
        return connect(self)

    def _folder(self, name: str) -> Path:
        return self.path / "nights" / f"{NIGHT}{name}"

    def _mark(self) -> bytes | None:
        with one_line_errors(self.path / MARK, "read"):
            try:
                return (self.path / MARK).read_bytes()
            except FileNotFoundError:
                return None

    def _said(self, mark: bytes) -> tuple[str, str]:
        """Read which night is in force, and the SHA-256 of its manifest."""
        try:
            said = json.loads(mark)
            return str(said["night"]), str(said["manifest"])
        except (ValueError, KeyError, TypeError, RecursionError):
            raise NightDamagedError(
                f"{self.path / MARK} is damaged; see what is sound with `legworth nights verify`, "
                "and say which night is in force with `legworth nights restore`"
            ) from None

    def _marked_name(self) -> str | None:
        """Name of the night said to be in force, sound or not; None if there is none or nobody can tell."""
        mark = self._mark()
        try:
            return None if mark is None else self._said(mark)[0]
        except NightDamagedError:
            return None

    def _resolve(self, mark: bytes) -> Night:
        name, expected = self._said(mark)
        night = Night(name, self._folder(name), expected)
        faults = night.quick_faults() if night_number(name) is not None else ("it has no such name",)
        if faults:
            more = f" and {len(faults) - 1:,} more" if len(faults) > 1 else ""
            raise NightDamagedError(
                f"night {name}, which is in force, is damaged: {faults[0]}{more}; see what is sound with "
                "`legworth nights verify`, and put a sound night in force with `legworth nights restore`"
            )
        return night

    def _names(self, room: str) -> list[str]:
        """Names of nights met in a room of the store."""
        found = (path.name.removeprefix(NIGHT).removeprefix("thinned-") for path in (self.path / room).glob("*"))
        names = (re.sub(r"\.jsonl?$", "", name) for name in found)
        return [name for name in names if night_number(name) is not None]

    def _next_number(self) -> int:
        """One above the greatest number ever used: the clock has no say in the order of nights."""
        names = [name for room in ROOMS for name in self._names(room)]
        names += [entry.night for entry in self.history()]
        return 1 + max((night_number(name) or 0 for name in names), default=0)

    def _settle(self) -> None:
        """Clear what a crashed process left aside, and note in the history what it did not carry out."""
        for room in ROOMS:
            (self.path / room).mkdir(exist_ok=True)
        for path in (self.path / "aside").iterdir():
            if path.is_dir() and path != self._open:
                shutil.rmtree(path, ignore_errors=True)
        for path in self.path.glob("*.new"):
            path.unlink(missing_ok=True)
        last = next((entry for entry in reversed(self.history()) if entry.event in (*IN_FORCE, "withdrawn")), None)
        if last is not None and last.event in IN_FORCE and last.night != self._marked_name():
            append_entry(
                self.history_file,
                HistoryEntry.now("withdrawn", last.night, None, reason="the process ended before it was in force"),
            )

    def _finish(self, unfinished: UnfinishedNight, manifest: Manifest) -> Night:
        """Move a synced night among the nights and put it in force; on failure all is as before."""
        data = manifest.as_bytes()
        night = Night(unfinished.name, self._folder(unfinished.name), digest(data))
        forced = manifest.forced
        entry = HistoryEntry.now(
            "force" if forced else "publish",
            night.name,
            digest(data),
            forced.who if forced else None,
            forced.reason if forced else None,
        )
        with one_line_errors(self.path, "write to"):
            unfinished.folder.rename(night.folder)
            try:
                sync(self.path / "nights")
                sync(self.path / "aside")
                self._put_in_force(night, data, entry)
            except BaseException:
                if self._marked_name() != night.name:
                    night.folder.rename(unfinished.folder)
                raise
        return night

    def _put_in_force(self, night: Night, manifest: bytes, entry: HistoryEntry) -> None:
        append_entry(self.history_file, entry)
        mark = json.dumps({"night": night.name, "manifest": digest(manifest)})
        replace_file(self.path / MARK, (mark + "\n").encode())
