"""A night of the store, complete and never changed again."""

from __future__ import annotations

import json
from collections.abc import Collection, Iterable, Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path

import pyarrow as pa

from legworth.store.disk import digest, file_digest
from legworth.store.manifest import Manifest, night_number
from legworth.store.tables import part_folder, part_names, read_parts
from network.errors import NightDamagedError, StoreError

__all__ = ["MANIFEST", "Night", "sound_parts"]

MANIFEST = "manifest.json"
HASHED_TOGETHER = 4


@dataclass(frozen=True)
class Night:
    """One night.

    Attributes
    ----------
    name
        Its name.
    folder
        Its folder, ``nights/night=NAME`` of the store.
    expected
        SHA-256 that its manifest must have, None where nobody has said so.
    """

    name: str
    folder: Path
    expected: str | None = None

    @property
    def number(self) -> int:
        """Its number, which alone orders nights."""
        return night_number(self.name) or 0

    @cached_property
    def manifest(self) -> Manifest:
        """Everything about the night.

        Raises
        ------
        NightDamagedError
            If the manifest is missing, unreadable, or not the one expected.
        """
        try:
            data = (self.folder / MANIFEST).read_bytes()
        except OSError as error:
            raise NightDamagedError(f"night {self.name} has no readable manifest.json ({error.strerror})") from None
        if self.expected is not None and digest(data) != self.expected:
            raise NightDamagedError(f"manifest.json of night {self.name} is not the one that was published")
        return Manifest.from_bytes(data, self.name)

    @cached_property
    def currency(self) -> str | None:
        """Currency of its prices: by its manifest, by its summaries where an older manifest has none, else None."""
        if self.manifest.currency is not None:
            return self.manifest.currency
        for part in self.parts():
            try:
                said = json.loads((self.folder / part_folder(part) / "summary.json").read_bytes()).get("currency")
            except (OSError, ValueError, AttributeError, RecursionError):
                continue
            if isinstance(said, str):
                return said
        return None

    def parts(self) -> tuple[str, ...]:
        """Names of its parts, sorted."""
        return tuple(sorted(self.manifest.part))

    def table(self, name: str, columns: Sequence[str] | None = None, parts: Iterable[str] | None = None) -> pa.Table:
        """Put one table together from all parts or some, with a column ``part``; see `tables.read_parts`.

        Raises
        ------
        StoreError
            If there is no such table, column or part.
        NightDamagedError
            If a file cannot be read.
        """
        chosen = sound_parts(self.parts(), parts, self.name)
        missing = [
            path
            for path in (f"part={part}/{name}.parquet" for part in chosen)
            if path in self.manifest.files and not (self.folder / path).exists()
        ]
        if missing:
            raise NightDamagedError(f"night {self.name} has lost {missing[0]}")
        try:
            return read_parts(self.folder, name, columns, chosen)
        except (OSError, pa.ArrowInvalid) as error:
            why = str(error).splitlines()[0]
            raise NightDamagedError(
                f"table {name} of night {self.name} cannot be read ({why}); look with `legworth nights verify`"
            ) from error

    def quick_faults(self, tables: Collection[str] | None = None) -> tuple[str, ...]:
        """Say what a look at the manifest and at names and lengths of files shows to be wrong.

        Parameters
        ----------
        tables
            Names of the tables to look at; all files if None.
        """
        try:
            files = self.manifest.files
        except NightDamagedError as error:
            return (str(error),)
        faults = []
        for path, entry in files.items():
            if tables is not None and path.rpartition("/")[2].rpartition(".")[0] not in tables:
                continue
            try:
                length = (self.folder / path).stat().st_size
            except OSError as error:
                faults.append(f"{path} is missing or out of reach ({error.strerror})")
                continue
            if length != entry.bytes:
                faults.append(f"{path} has {length:,} bytes, not {entry.bytes:,}")
        return tuple(faults)

    def verify(self) -> tuple[str, ...]:
        """Read every file and say what is wrong: missing, added or changed files, an unreadable manifest.

        Returns
        -------
        tuple of str
            One line a fault; empty if the night is sound.
        """
        faults = list(self.quick_faults())
        try:
            files = self.manifest.files
        except NightDamagedError:
            return tuple(faults)
        same_length = [path for path in files if not any(fault.startswith(f"{path} ") for fault in faults)]

        def changed(path: str) -> str | None:
            try:
                same = file_digest(self.folder / path) == files[path].sha256
            except OSError as error:
                return f"{path} cannot be read ({error.strerror})"
            return None if same else f"{path} has been changed: its SHA-256 is not that of the manifest"

        with ThreadPoolExecutor(HASHED_TOGETHER) as pool:
            faults += [fault for fault in pool.map(changed, same_length) if fault]
        there = {path.relative_to(self.folder).as_posix() for path in self.folder.rglob("*") if not path.is_dir()}
        faults += [f"{path} does not belong to the night" for path in sorted(there - {MANIFEST, *files})]
        if set(part_names(self.folder)) != set(self.manifest.part) and not faults:
            faults.append("the part folders are not those that the manifest names")
        return tuple(faults)


def sound_parts(known: tuple[str, ...], asked: Iterable[str] | None, night: str) -> tuple[str, ...]:
    """Return the parts asked for, all if None.

    Raises
    ------
    StoreError
        If one is not there.
    """
    if asked is None:
        return known
    chosen = tuple(asked)
    unknown = sorted(set(chosen) - set(known))
    if unknown:
        raise StoreError(f"night {night} has no part {unknown[0]!r}; its parts are {', '.join(known[:10])}")
    return chosen
