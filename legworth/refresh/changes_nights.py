"""Two nights side by side: what a night offers to a reader, and which of its files are last night's own."""

from __future__ import annotations

import filecmp
from collections.abc import Sequence
from dataclasses import dataclass
from datetime import datetime
from pathlib import Path
from typing import Protocol

import pyarrow as pa

from legworth.store.tables import part_folder
from network import Faults, InputError
from network.settings import read_settings

__all__ = ["NightFacts", "NightTables", "folder_of", "same_parts", "table_files"]


class NightTables(Protocol):
    """A night of the store, finished or not: network folders by part, and their tables put together."""

    @property
    def name(self) -> str:
        """Name of the night."""

    @property
    def folder(self) -> Path:
        """Where the night lies."""

    def parts(self) -> tuple[str, ...]:
        """Names of its parts."""

    def table(self, name: str, columns: Sequence[str] | None = None, parts: Sequence[str] | None = None) -> pa.Table:
        """One table of some parts put together, with a column ``part``."""


@dataclass(frozen=True)
class NightFacts:
    """What a night says about itself: its name, name, currency and snapshot of its network."""

    night: str
    network: str
    currency: str
    as_of: datetime

    @classmethod
    def of(cls, night: NightTables) -> NightFacts:
        """Read them from the settings of the first part; all parts share them.

        Raises
        ------
        InputError
            If the settings cannot be read.
        """
        faults = Faults()
        settings = read_settings(folder_of(night, night.parts()[0]), faults)
        if settings is None:
            raise InputError(faults.errors)
        return cls(night.name, settings.name, settings.currency, settings.as_of)


def folder_of(night: NightTables, part: str) -> Path:
    """Folder of a part, a network folder of its own."""
    return night.folder / part_folder(part)


def table_files(night: NightTables, table: str, parts: Sequence[str]) -> list[Path]:
    """Parquet files of a table in some parts, without those that do not have it."""
    paths = [folder_of(night, part) / f"{table}.parquet" for part in parts]
    return [path for path in paths if path.exists()]


def same_parts(tonight: NightTables, last: NightTables, table: str) -> frozenset[str]:
    """Parts whose file of a table is last night's own: a hard link to it, or a copy with the same bytes."""
    found = []
    for part in set(tonight.parts()) & set(last.parts()):
        now, then = (folder_of(night, part) / f"{table}.parquet" for night in (tonight, last))
        if now.exists() and then.exists() and (now.samefile(then) or filecmp.cmp(now, then, shallow=False)):
            found.append(part)
    return frozenset(found)
