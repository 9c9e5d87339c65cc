"""The input of a night: one private copy of the tables, hashed as it is made, from one moment.

Tables are fed by other programs, which may be at work while the night begins. Everything is read from a copy, so what
was hashed is what was read; and every file is looked at before the first is copied and again after the last, so that a
night is never made of files from two moments.
"""

from __future__ import annotations

import hashlib
import shutil
import time
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

from legworth.refresh.part_folder import INPUT_TABLES
from legworth.store import FileEntry
from network import SettingError

__all__ = ["Snapshot", "take_snapshot"]

NAMES = ("network.toml", *(f"{table}.{ending}" for table in INPUT_TABLES for ending in ("csv", "parquet")))
BLOCK = 1 << 22
ATTEMPTS = 2
COARSE = 2.0
"""Seconds within which a file system may give two writes the same time."""

Stamp = tuple[int, int, int, int, int]


@dataclass(frozen=True)
class Snapshot:
    """The copy: its folder, and hash and length of every file by name."""

    folder: Path
    files: dict[str, FileEntry]


def take_snapshot(folder: Path, into: Path, retried: Callable[[str], None] | None = None) -> Snapshot:
    """Copy the input files of a network folder.

    Parameters
    ----------
    folder
        The network folder.
    into
        Where the copy goes; made anew.
    retried
        Called with the reason when a file changed and the copy is made once more.

    Raises
    ------
    SettingError
        If a file was changed, added or removed while it was copied, twice in a row, or cannot be copied.
    """
    folder = folder.resolve()  # a link that is turned to another folder meanwhile is not followed
    for attempt in range(1, ATTEMPTS + 1):
        before = _stamps(folder)
        began = time.time()
        try:
            files = _copy(folder, into, before)
        except OSError as error:
            name = Path(error.filename or folder).name  # a disk that is full names no file
            raise SettingError(
                f"{name}: cannot be copied ({error.strerror}); free space or correct the file"
            ) from error
        moved = _changed(folder, before, began, files)
        if not moved:
            return Snapshot(into, files)
        if attempt < ATTEMPTS and retried is not None:
            retried(moved)
    raise SettingError(
        f"{folder.name}: {moved} while the tables were read, twice; "
        "wait until whoever writes them has ended, then refresh"
    )


def _stamps(folder: Path) -> dict[str, Stamp]:
    """Identity, length and times of every input file that is there."""
    found = {}
    for name in NAMES:
        try:
            stat = (folder / name).stat()
        except OSError:
            continue
        found[name] = (stat.st_dev, stat.st_ino, stat.st_size, stat.st_mtime_ns, stat.st_ctime_ns)
    return found


def _copy(folder: Path, into: Path, stamps: dict[str, Stamp]) -> dict[str, FileEntry]:
    """Copy and hash; what is no readable file is left for the reader of tables to tell of."""
    shutil.rmtree(into, ignore_errors=True)
    into.mkdir(parents=True)
    files = {}
    for name in stamps:
        source, target = folder / name, into / name
        if source.is_dir():
            target.mkdir()
            continue
        try:
            stream = source.open("rb")
        except FileNotFoundError:
            continue  # the second look finds it missing
        except PermissionError:
            target.touch(mode=0)
            continue
        digest, length = hashlib.sha256(), 0
        with stream, target.open("xb") as copy:
            while block := stream.read(BLOCK):
                digest.update(block)
                length += len(block)
                copy.write(block)
        files[name] = FileEntry(sha256=digest.hexdigest(), bytes=length)
    return files


def _changed(folder: Path, before: dict[str, Stamp], began: float, files: dict[str, FileEntry]) -> str:
    """Say which file changed since the first look; nothing if none did."""
    after = _stamps(folder)
    for name in sorted({*before, *after}):
        if name not in before:
            return f"{name} was added"
        if name not in after:
            return f"{name} was removed"
        if before[name] != after[name]:
            return f"{name} was changed"
    # A file written just before the first look can be written again under the same time: read it once more.
    for name, entry in files.items():
        if before[name][3] / 1e9 > began - COARSE and _digest(folder / name) != entry.sha256:
            return f"{name} was changed"
    return ""


def _digest(path: Path) -> str:
    try:
        with path.open("rb") as stream:
            return hashlib.file_digest(stream, "sha256").hexdigest()
    except OSError:
        return ""
