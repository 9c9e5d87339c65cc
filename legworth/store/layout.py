"""The folder of a store: what marks it as one, and its rooms."""

from __future__ import annotations

import json
from pathlib import Path

from legworth.store.disk import replace_file
from legworth.store.manifest import LAYOUT
from network.errors import StoreError

__all__ = ["ROOMS", "open_folder"]

MARKER = "store.json"
ROOMS = ("nights", "aside", "stopped", "log")


def open_folder(path: Path, *, create: bool) -> None:
    """Make sure that a folder is a store, or make it one if it is empty or not there yet.

    Raises
    ------
    StoreError
        If it is none and is not to be made one, or is one of another layout.
    """
    try:
        found = json.loads((path / MARKER).read_bytes())
    except FileNotFoundError:
        _make(path, create=create)
        return
    except NotADirectoryError:
        raise StoreError(f"{path} is a file, not a store of nights; name another folder") from None
    except (ValueError, RecursionError):
        raise StoreError(f"{path / MARKER} is damaged; put {_marker().decode().strip()} into it") from None
    if not isinstance(found, dict) or found.get("layout") != LAYOUT:
        raise StoreError(f"{path} is no store of layout {LAYOUT}; use the program that made it")


def _marker() -> bytes:
    return (json.dumps({"layout": LAYOUT}) + "\n").encode()


def _make(path: Path, *, create: bool) -> None:
    if not create:
        raise StoreError(f"{path} is no store of nights; name one, or fill one with `legworth refresh`")
    path.mkdir(parents=True, exist_ok=True)
    strangers = sorted({found.name for found in path.iterdir() if not found.name.endswith(".new")} - set(ROOMS))
    if strangers:
        raise StoreError(f"{path} is no store of nights and holds {strangers[0]}; name an empty folder")
    for room in ROOMS:
        (path / room).mkdir(exist_ok=True)
    replace_file(path / MARKER, _marker())
