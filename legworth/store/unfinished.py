"""A night in the making: files written aside, then published by one rename, or gone without a trace."""

from __future__ import annotations

import json
import re
import shutil
from collections.abc import Callable, Iterable, Mapping, Sequence
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import pyarrow as pa

from legworth.store.disk import digest, file_digest, link_or_copy, one_line_errors, replace_file, sync_all, write_new
from legworth.store.manifest import FileEntry, Manifest
from legworth.store.night import MANIFEST, Night, sound_parts
from legworth.store.tables import part_names, read_parts, table_notes
from network.errors import NightDamagedError, StoreError

__all__ = ["UnfinishedNight"]

PATH = re.compile(r"(part=(?P<part>[A-Za-z0-9][A-Za-z0-9._-]*)/)?[A-Za-z0-9][A-Za-z0-9._-]*")


class UnfinishedNight:
    """A night that nobody else sees yet. `Store.begin` makes it.

    Attributes
    ----------
    name, number
        Name and number that the night will have.
    folder
        Where its files are written.
    log
        File for one JSON line per event, ``log/NAME.jsonl`` of the store; it stays whatever becomes of the night.
    """

    def __init__(
        self, name: str, number: int, folder: Path, store: Path, finish: Callable[[UnfinishedNight, Manifest], Night]
    ) -> None:
        self.name = name
        self.number = number
        self.folder = folder
        self.log = store / "log" / f"{name}.jsonl"
        self._stopped = store / "stopped" / f"{name}.json"
        self._finish = finish
        self._files: dict[str, FileEntry] = {}
        self._unsynced: set[str] = set()

    def write(self, path: str, data: bytes) -> str:
        """Write one file.

        Parameters
        ----------
        path
            ``NAME.ENDING`` or ``part=PART/NAME.ENDING``; letters, digits, points, hyphens and underscores.
        data
            The whole of it. It is on the disk by the time the night is published.

        Returns
        -------
        str
            SHA-256 of the data.

        Raises
        ------
        StoreError
            If the path is none of these, or the disk is full.
        """
        _check(path)
        with one_line_errors(self.folder / path, "write"):
            write_new(self.folder / path, data)
        self._files[path] = FileEntry(sha256=digest(data), bytes=len(data))
        self._unsynced.add(path)
        return self._files[path].sha256

    def take_over(self, path: str, night: Night) -> str:
        """Take one file over from a night, unchanged: as a hard link, or a copy where links do not work.

        Returns
        -------
        str
            SHA-256 of the file as it is on the disk now.

        Raises
        ------
        NightDamagedError
            If the file is not what the manifest of that night says.
        StoreError
            If the disk is full.
        """
        _check(path)
        entry = night.manifest.files.get(path)
        if entry is None:
            raise StoreError(f"night {night.name} has no file {path}; write it instead")
        source = night.folder / path
        if not source.exists():
            raise NightDamagedError(f"night {night.name} has lost {path}")
        with one_line_errors(self.folder / path, "write"):
            link_or_copy(source, self.folder / path)
            found = FileEntry(sha256=file_digest(self.folder / path), bytes=(self.folder / path).stat().st_size)
        if found != entry:
            (self.folder / path).unlink()
            raise NightDamagedError(f"{path} of night {night.name} has been changed since it was published")
        self._files[path] = found
        self._unsynced.add(path)
        return found.sha256

    def parts(self) -> tuple[str, ...]:
        """Names of the parts written so far, sorted."""
        return part_names(self.folder)

    def table(self, name: str, columns: Sequence[str] | None = None, parts: Iterable[str] | None = None) -> pa.Table:
        """Put one table together from all parts or some, with a column ``part``, as `Night.table` does."""
        return read_parts(self.folder, name, columns, sound_parts(self.parts(), parts, self.name))

    def rows(self) -> dict[str, int]:
        """Rows by table, over the parts written so far."""
        return table_notes(self.folder, self.parts()).rows

    def stop(self, document: Mapping[str, Any]) -> Path:
        """Write down why this night is not published: ``stopped/NAME.json``, synced.

        Parameters
        ----------
        document
            What to look at first, as JSON.
        """
        text = json.dumps(document, indent=1, ensure_ascii=False, allow_nan=False, default=str)
        with one_line_errors(self._stopped, "write"):
            self._stopped.parent.mkdir(exist_ok=True)
            replace_file(self._stopped, (text + "\n").encode())
        return self._stopped

    def publish(self, manifest: Manifest) -> Night:
        """Put the night in force: sync everything, move it among the nights, and rename ``in_force``.

        Parameters
        ----------
        manifest
            All but what the finished night says by itself: files, rows, columns, instant of publication.

        Raises
        ------
        StoreError
            If the disk is full; the night in force before stays so.
        ValueError
            If the manifest is that of another night, or its parts are not those written.
        """
        if (manifest.night, manifest.number) != (self.name, self.number):
            raise ValueError(f"manifest of night {manifest.night} given to night {self.name}")
        if len(manifest.part) != len(manifest.parts) or set(manifest.part) != set(self.parts()):
            raise ValueError("the parts of the manifest are not the parts written")
        notes = table_notes(self.folder, self.parts())
        whole = manifest.model_copy(
            update={
                "published": manifest.published or datetime.now(UTC),
                "files": dict(sorted(self._files.items())),
                "rows": notes.rows,
                "columns": notes.columns,
                "mixed": notes.mixed,
            }
        )
        with one_line_errors(self.folder, "write"):
            write_new(self.folder / MANIFEST, whole.as_bytes())
            sync_all([self.folder / MANIFEST, *(self.folder / path for path in sorted(self._unsynced))])
            sync_all([*(path for path in self.folder.iterdir() if path.is_dir()), self.folder])
        return self._finish(self, whole)

    def discard(self) -> None:
        """Remove what was written; nothing happens once the night is published."""
        shutil.rmtree(self.folder, ignore_errors=True)


def _check(path: str) -> None:
    if not PATH.fullmatch(path) or path == MANIFEST:
        raise StoreError(f"{path!r} cannot be a file of a night; name it NAME.ENDING or part=PART/NAME.ENDING")
