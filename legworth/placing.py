"""Files of a run moved into a folder together: all of them, or the folder as it was."""

from __future__ import annotations

import os
import shutil
import tempfile
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from pathlib import Path

from network import SettingError

__all__ = ["folder_aside", "place_together"]


@contextmanager
def folder_aside(out: Path, names: Sequence[str]) -> Iterator[Path]:
    """Give a hidden folder inside a folder to write files into before they are placed, and remove it.

    Parameters
    ----------
    out
        Where the files are to go; made if it is not there, and removed again if nothing came of it.
    names
        The files.

    Raises
    ------
    SettingError
        If a folder stands where a file is to go, or something inside raises OSError.
    """
    for name in names:
        if (out / name).is_dir():
            raise SettingError(f"{out / name} is a folder, where a result is to go; move it away")
    made = not out.exists()
    try:
        out.mkdir(parents=True, exist_ok=True)
        aside = Path(tempfile.mkdtemp(prefix=".unfinished-", dir=out))
        try:
            yield aside
        finally:
            shutil.rmtree(aside, ignore_errors=True)
            if made and not any(out.iterdir()):
                out.rmdir()
    except OSError as error:
        raise SettingError(f"cannot write to {out} ({error.strerror}); free space or name another folder") from error


def place_together(aside: Path, out: Path, names: Sequence[str], gone: Sequence[str] = ()) -> None:
    """Move files into a folder and take others away; if one step fails, all that was there is put back.

    Single files are replaced by a rename, so readers see the old or the new one. Between the renames of several a
    power failure may still fall, as no file system renames more than one at once.

    Parameters
    ----------
    aside
        Folder that holds the new files, on the same file system; it is the caller's to remove.
    out
        Where they go.
    names
        The files, in the order in which they are moved.
    gone
        Files of ``out`` that are removed afterwards; those that are not there are passed.

    Raises
    ------
    OSError
        If a file cannot be moved or removed; ``out`` is then as it was.
    """
    before = aside / ".before"
    before.mkdir()
    for name in (*names, *gone):
        if (out / name).exists():
            _copy(out / name, before / name)
    touched: list[str] = []
    try:
        for name in names:
            touched.append(name)
            (aside / name).replace(out / name)
        for name in gone:
            touched.append(name)
            (out / name).unlink(missing_ok=True)
    except BaseException:
        for name in touched:
            if (before / name).exists():
                (before / name).replace(out / name)
            elif not (aside / name).exists():
                (out / name).unlink(missing_ok=True)
        raise


def _copy(path: Path, copy: Path) -> None:
    """Keep a file under a second name, as a copy where the file system has no links."""
    try:
        os.link(path, copy)
    except OSError:
        shutil.copy2(path, copy)
