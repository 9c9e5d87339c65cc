"""Files that are to survive a power cut: written whole, synced, put in place by one rename.

Nothing here writes into a file that exists: a file of a night may be a hard link to last night's.
"""

from __future__ import annotations

import errno
import hashlib
import os
import shutil
from collections.abc import Iterable, Iterator
from concurrent.futures import ThreadPoolExecutor
from contextlib import contextmanager
from pathlib import Path

from network.errors import LegworthError, StoreError

__all__ = [
    "append_line",
    "digest",
    "file_digest",
    "held_folder",
    "link_or_copy",
    "one_line_errors",
    "replace_file",
    "sync",
    "sync_all",
    "write_new",
]

BLOCK = 1 << 20
SYNCED_TOGETHER = 8
"""Files synced side by side: a journal commits them together, so that waiting overlaps."""


def digest(data: bytes) -> str:
    """SHA-256 of some bytes, in hexadecimal."""
    return hashlib.sha256(data).hexdigest()


def file_digest(path: Path) -> str:
    """SHA-256 of a file, in hexadecimal."""
    with path.open("rb") as file:
        return hashlib.file_digest(file, "sha256").hexdigest()


def write_new(path: Path, data: bytes) -> None:
    """Write a file under a name that is free, or made free; it is not synced yet."""
    path.parent.mkdir(parents=True, exist_ok=True)
    path.unlink(missing_ok=True)
    with path.open("xb") as file:
        file.write(data)


def link_or_copy(source: Path, target: Path) -> None:
    """Give a file a second name, or copy it where links do not work; a copy is not synced yet."""
    target.parent.mkdir(parents=True, exist_ok=True)
    target.unlink(missing_ok=True)
    try:
        target.hardlink_to(source)
    except OSError as error:
        if error.errno == errno.ENOSPC or not source.exists():
            raise
        shutil.copyfile(source, target)


def replace_file(path: Path, data: bytes) -> None:
    """Put new content in the place of a file by one rename: readers see the old or the new, whole.

    What can fail comes before the rename: the folder is opened first, and only has to be synced afterwards.
    """
    aside = path.with_name(f"{path.name}.{os.getpid()}.new")
    with held_folder(path.parent) as folder:
        try:
            write_new(aside, data)
            sync(aside)
            aside.replace(path)
        except BaseException:
            aside.unlink(missing_ok=True)
            raise
        if folder is not None:
            os.fsync(folder)


@contextmanager
def held_folder(path: Path) -> Iterator[int | None]:
    """Hold a folder open, so that its names can be synced; None where folders cannot be, and need not be."""
    if os.name == "nt":
        yield None
        return
    handle = os.open(path, os.O_RDONLY)
    try:
        yield handle
    finally:
        os.close(handle)


def append_line(path: Path, line: str) -> None:
    """Add one line at the end of a file and sync it; on failure the file is as long as before.

    A last line that a crash has cut short is ended first, so that it spoils no other.
    """
    handle = os.open(path, os.O_RDWR | os.O_CREAT, 0o644)
    try:
        length = os.lseek(handle, 0, os.SEEK_END)
        torn = length > 0 and os.pread(handle, 1, length - 1) != b"\n"
        data = (("\n" if torn else "") + line + "\n").encode()
        try:
            if os.write(handle, data) != len(data):
                raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))
            os.fsync(handle)
        except OSError:
            os.ftruncate(handle, length)
            raise
    finally:
        os.close(handle)
    sync(path.parent)


def sync(path: Path) -> None:
    """Wait until a file, or the names in a folder, are on the disk."""
    if os.name == "nt" and path.is_dir():
        return
    handle = os.open(path, os.O_RDONLY)
    try:
        os.fsync(handle)
    finally:
        os.close(handle)


def sync_all(paths: Iterable[Path]) -> None:
    """Sync many files or folders."""
    with ThreadPoolExecutor(SYNCED_TOGETHER) as pool:
        for _ in pool.map(sync, paths):
            pass


@contextmanager
def one_line_errors(place: Path, doing: str) -> Iterator[None]:
    """Turn what the file system refuses into one line that says what to do.

    Raises
    ------
    StoreError
        In place of any OSError.
    """
    try:
        yield
    except LegworthError:
        raise
    except OSError as error:
        mend = {
            errno.ENOSPC: "free space and try again",
            errno.EDQUOT: "free space within your quota and try again",
            errno.EROFS: "mount it for writing",
            errno.EACCES: "give this user the right to it",
            errno.EPERM: "give this user the right to it",
        }.get(error.errno or 0, "put that right and try again")
        where = Path(os.fsdecode(error.filename)) if error.filename else place
        raise StoreError(f"cannot {doing} {where} ({error.strerror or error}); {mend}") from error
