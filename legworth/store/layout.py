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
        found = None
    layout = found.get("layout") if isinstance(found, dict) else None
    if not isinstance(layout, int) or isinstance(layout, bool):
        raise StoreError(f"{path / MARKER} is damaged; put {_text()} into it")
    if layout != LAYOUT:
        raise StoreError(f"{path} has layout {layout}, and this program reads layout {LAYOUT}; use one that made it")


def _text() -> str:
    return json.dumps({"layout": LAYOUT})


def _make(path: Path, *, create: bool) -> None:
    there = {found.name for found in path.iterdir() if not found.name.endswith(".new")} if path.exists() else set()
    strangers = sorted(there - set(ROOMS), key=lambda name: (name.startswith("."), name))
    if strangers and ROOMS[0] in there:
        mend = f"if it was one, put {_text()} into {path / MARKER}; else name another folder"
        raise StoreError(f"{path} is no store of nights and holds {strangers[0]}; {mend}")
    if not create:
        raise StoreError(f"{path} is no store of nights; name one, or fill one with `legworth refresh`")
    if strangers:
        raise StoreError(f"{path} is no store of nights and holds {strangers[0]}; name an empty folder")
    path.mkdir(parents=True, exist_ok=True)
    for room in ROOMS:
        (path / room).mkdir(exist_ok=True)
    replace_file(path / MARKER, f"{_text()}\n".encode())
