"""Tables of a night, put together from its parts."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq

from network.errors import StoreError

__all__ = ["PART", "TableNotes", "part_folder", "part_names", "read_parts", "table_notes"]

PART = "part="
READ_TOGETHER = 4


def part_folder(part: str) -> str:
    """Name of the folder of a part, which is also its Hive partition."""
    return PART + part


def part_names(folder: Path) -> tuple[str, ...]:
    """Names of the parts whose folders stand in the folder of a night, sorted."""
    return tuple(sorted(path.name.removeprefix(PART) for path in folder.glob(f"{PART}*") if path.is_dir()))


def read_parts(folder: Path, name: str, columns: Sequence[str] | None, parts: Iterable[str]) -> pa.Table:
    """Put a table together.

    Parameters
    ----------
    folder
        Folder of the night.
    name, columns, parts
        The table, its columns (all if None), and the parts to read, which come out in that order.

    Returns
    -------
    pyarrow.Table
        With the column ``part`` first. Parts that do not have the table have no rows in it; columns that only some
        parts have are null in the others.

    Raises
    ------
    StoreError
        If no part has the table, or it has no such column.
    """
    found = [(part, folder / part_folder(part) / f"{name}.parquet") for part in parts]
    found = [(part, path) for part, path in found if path.exists()]
    if not found:
        known = sorted({path.stem for path in folder.glob(f"{PART}*/*.parquet")})
        raise StoreError(
            f"no part of {folder.name} asked for has a table {name!r}; it has {', '.join(known) or 'none'}"
        )

    def read(item: tuple[str, Path]) -> pa.Table:
        part, path = item
        file = pq.ParquetFile(path)
        wanted = None if columns is None else [column for column in columns if column in file.schema_arrow.names]
        table = file.read(columns=wanted, use_threads=False)
        label = pa.DictionaryArray.from_arrays(pa.array(np.zeros(table.num_rows, dtype=np.int32)), pa.array([part]))
        return table.replace_schema_metadata(None).add_column(0, "part", label)

    with ThreadPoolExecutor(READ_TOGETHER) as pool:
        tables = list(pool.map(read, found))
    whole = pa.concat_tables(tables, promote_options="permissive")
    if columns is None:
        return whole
    missing = [column for column in columns if column not in whole.column_names]
    if missing:
        raise StoreError(f"table {name!r} of {folder.name} has no column {missing[0]!r}")
    return whole.select(["part", *(column for column in columns if column != "part")])


class TableNotes:
    """What the Parquet footers of a night say: rows and columns by table.

    Attributes
    ----------
    rows
        Rows by table.
    columns
        Arrow type by column by table, over all parts.
    mixed
        Tables whose columns are not the same in all parts, sorted.
    """

    def __init__(self) -> None:
        self.rows: dict[str, int] = {}
        self.columns: dict[str, dict[str, str]] = {}
        self.mixed: tuple[str, ...] = ()

    def note(self, name: str, rows: int, columns: dict[str, str]) -> None:
        """Add one part of a table."""
        self.rows[name] = self.rows.get(name, 0) + rows
        known = self.columns.setdefault(name, dict(columns))
        if known != columns:
            self.mixed = tuple(sorted({*self.mixed, name}))
            for column, kind in columns.items():
                if known.get(column, "null") == "null":
                    known[column] = kind


def table_notes(folder: Path, parts: Iterable[str]) -> TableNotes:
    """Read the footers of all tables of a night.

    Raises
    ------
    StoreError
        If a file that ends in ``.parquet`` is none.
    """

    def footer(path: Path) -> tuple[str, int, dict[str, str]]:
        try:
            file = pq.ParquetFile(path)
        except pa.ArrowInvalid as error:
            raise StoreError(f"{path} is not a Parquet file ({error}); write it as one") from None
        return path.stem, file.metadata.num_rows, {field.name: str(field.type) for field in file.schema_arrow}

    notes = TableNotes()
    paths = [path for part in parts for path in sorted((folder / part_folder(part)).glob("*.parquet"))]
    with ThreadPoolExecutor(READ_TOGETHER) as pool:
        for found in pool.map(footer, paths):
            notes.note(*found)
    return notes
