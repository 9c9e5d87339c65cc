"""What a bad folder is: how the sound one is spoiled, and every place that must be named, and no other."""

from __future__ import annotations

from collections.abc import Callable

from tests.folders import Folder

__all__ = ["Case", "Cases", "Place", "in_cells"]

Place = tuple[str, int, str]
"""File, line (0 for the whole file) and column (empty for the whole line)."""
Case = tuple[Callable[[Folder], Folder], list[Place]]
Cases = dict[str, Case]


def in_cells(*cells: tuple[str, int, str, str]) -> Case:
    """Case of faulty cells alone: table, line, column and the value written there."""

    def spoil(folder: Folder) -> Folder:
        for table, line, column, value in cells:
            folder.cell(f"{table}.csv", line, column, value)
        return folder

    return spoil, [(f"{table}.csv", line, column) for table, line, column, _ in cells]
