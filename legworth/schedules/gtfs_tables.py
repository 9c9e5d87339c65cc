"""Tables of a GTFS feed, from a zip file or a folder, with the columns that are used here."""

from __future__ import annotations

import csv
import lzma
import shutil
import tempfile
import zipfile
import zlib
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import replace
from pathlib import Path

import numpy as np
import pandas as pd

from network import Fault, InputError, TableSchema, table_schema
from network.arrays import BoolArray, IntArray, NameArray
from network.cells import TableData
from network.faults import Faults
from network.reading import read_file
from network.schema import Column

__all__ = ["GtfsTable", "GtfsTables", "read_tables"]

NEEDED = ("agency", "stops", "routes", "trips", "stop_times")
OPTIONAL = ("calendar", "calendar_dates", "frequencies", "transfers")
LARGEST = 8 << 30
"""Bytes that the files of a feed may hold altogether."""

BROKEN_ZIP = (zipfile.BadZipFile, RuntimeError, NotImplementedError, zlib.error, lzma.LZMAError, EOFError, OSError)


class GtfsTable:
    """One table as read, by column."""

    def __init__(self, data: TableData, faults: Faults) -> None:
        self.data, self.faults = data, faults

    def __len__(self) -> int:
        return len(self.data)

    def note(self, rows: IntArray, column: str, problem: object, *, warning: bool = False) -> None:
        """Note one fault of the same kind for each row; ``problem`` says what is wrong with a row."""
        assert callable(problem)
        self.faults.add_rows(self.data.file, rows, self.data.line_of, column, problem, warning=warning)

    def texts(self, column: str) -> NameArray:
        """Text of a column, "" where there is none."""
        values = self.data.frame[column].astype(object)
        return np.asarray(values.where(values.notna(), ""), dtype=object)

    def codes(self, column: str) -> tuple[IntArray, list[str]]:
        """(n,) positions of the texts of a column, -1 where there is none, and the texts."""
        values = self.data.frame[column]
        return values.cat.codes.to_numpy().astype(np.int64), [str(text) for text in values.cat.categories]

    def numbers(self, column: str, blank: int = 0) -> IntArray:
        """Whole numbers of a column."""
        found: IntArray = self.data.frame[column].fillna(blank).to_numpy(dtype=np.int64)
        return found

    def figures(self, column: str) -> np.ndarray:
        """Figures of a column, NaN where there is none."""
        return self.data.frame[column].to_numpy(dtype=np.float64, copy=True)

    def find(self, column: str, among: GtfsTable, key: str) -> IntArray:
        """(n,) row of ``among`` whose key a column names, -1 where it is blank; notes names that are not there."""
        at, names = self.codes(column)
        rows = pd.Index(among.texts(key), dtype=object)
        first = np.flatnonzero(~rows.duplicated())
        place = np.append(first, -1)[rows[first].get_indexer(pd.Index(names, dtype=object))]
        found = np.append(place, -1)[at]
        unknown: BoolArray = (at >= 0) & (found < 0)
        self.note(
            np.flatnonzero(unknown),
            column,
            lambda row: f"{names[at[row]]!r} is not a {key} of {among.data.file}; add it or correct the name",
        )
        return found


GtfsTables = dict[str, GtfsTable]
"""Tables of a feed by name; those that are optional may be absent."""


def read_tables(path: Path, faults: Faults) -> GtfsTables | None:
    """Read the tables of a feed.

    Parameters
    ----------
    path
        A zip file or a folder.
    faults
        Receives everything that is wrong with single tables.

    Returns
    -------
    GtfsTables or None
        None if a table that is needed cannot be read.
    """
    tables: GtfsTables = {}
    with _opened(path) as folder:
        for name in (*NEEDED, *OPTIONAL):
            file = folder / f"{name}.txt"
            if not file.is_file():
                if name in NEEDED:
                    faults.add(file.name, 0, "", "the table is missing; a feed needs it")
                continue
            if name in OPTIONAL and not _has_rows(file):
                continue
            table = read_file(file, _schema(name, file), faults)
            if table is not None:
                tables[name] = GtfsTable(table, faults)
    if "calendar" not in tables and "calendar_dates" not in tables and not faults.errors:
        faults.add("calendar.txt", 0, "", "neither this table nor calendar_dates.txt has any rows; a feed needs one")
    return tables if all(name in tables for name in NEEDED) else None


def _schema(name: str, file: Path) -> TableSchema:
    """Schema of a table, with the columns that are not used here as optional text."""
    schema = table_schema("legworth", f"gtfs_{name}")
    with file.open("rb") as lines:
        start = lines.readline(1 << 16).removeprefix(b"\xef\xbb\xbf").decode("utf-8", "replace")
    try:
        header = next(csv.reader([start]), [])
    except csv.Error:
        header = []
    others = dict.fromkeys(column.strip() for column in header if column.strip())
    unused = tuple(Column(other, "string", "Not used.", optional=True) for other in others if other not in schema.names)
    return replace(schema, columns=schema.columns + unused)


def _has_rows(file: Path) -> bool:
    with file.open("rb") as lines:
        return sum(1 for _, line in zip(range(3), (line for line in lines if line.strip()), strict=False)) > 1


@contextmanager
def _opened(path: Path) -> Iterator[Path]:
    """Give the folder of a feed; a zip file is unpacked for the time being."""
    if path.is_dir():
        yield path
        return
    with tempfile.TemporaryDirectory(prefix="legworth-") as made:
        folder = Path(made)
        wanted = {f"{name}.txt" for name in (*NEEDED, *OPTIONAL)}
        try:
            with zipfile.ZipFile(path) as archive:
                members = [member for member in archive.infolist() if member.filename in wanted]
                if sum(member.file_size for member in members) > LARGEST:
                    raise _unreadable(path, f"unpacks to more than {LARGEST >> 30} GB")
                for member in members:
                    with archive.open(member) as packed, (folder / member.filename).open("wb") as file:
                        shutil.copyfileobj(packed, file)
        except InputError:
            raise
        except (*BROKEN_ZIP, ValueError, OverflowError) as error:
            reason = next(iter(str(error).splitlines()), type(error).__name__)
            raise _unreadable(path, f"cannot be read as a zip file ({reason})") from error
        yield folder


def _unreadable(path: Path, problem: str) -> InputError:
    return InputError([Fault(path.name, 0, "", f"{problem}; give the feed anew, as a zip file or a folder")])
