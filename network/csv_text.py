"""CSV files as text: encoding, header and line numbers, with every fault named before any value is read."""

from __future__ import annotations

import csv
import difflib
import io
from collections.abc import Callable
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np

from network.faults import Faults
from network.schema import TableSchema

__all__ = ["LONGEST_LINE", "CsvText", "check_columns", "open_csv"]

LONGEST_LINE = 1_000_000
"""Bytes that one line may hold; anything longer is taken for a file that is not a table."""

UTF8_MARK = b"\xef\xbb\xbf"
OTHER_MARKS = {b"\xff\xfe": "UTF-16", b"\xfe\xff": "UTF-16"}


@dataclass(frozen=True)
class CsvText:
    """A CSV file whose text and header are sound."""

    file: str
    data: bytes
    header: tuple[str, ...]

    @cached_property
    def record_lines(self) -> list[int]:
        """Line on which every record after the header begins (blank lines hold no record)."""
        reader = self._reader()
        lines = []
        before = 0
        for record in reader:
            if record:
                lines.append(before + 1)
            before = reader.line_num
        return lines[1:]

    def line_of(self, row: int) -> int:
        """Line on which the record at position ``row`` begins."""
        return self.record_lines[row]

    def records(self, faults: Faults) -> tuple[list[list[str]], Callable[[int], int]]:
        """Read records one by one, noting those with a wrong number of values.

        Returns
        -------
        records, line_of
            The records with the right number of values, and the line of each by position.
        """
        reader = self._reader()
        kept: list[list[str]] = []
        lines: list[int] = []
        ragged: list[tuple[int, int]] = []
        before = 0
        try:
            next(reader)
            before = reader.line_num
            for record in reader:
                if len(record) == len(self.header):
                    kept.append(record)
                    lines.append(before + 1)
                elif record:
                    ragged.append((before + 1, len(record)))
                before = reader.line_num
        except csv.Error as error:
            faults.add(self.file, before + 1, "", f"cannot be read as CSV ({error}); look for a stray quote")
        wanted = len(self.header)
        faults.add_rows(
            self.file,
            range(len(ragged)),
            lambda row: ragged[row][0],
            "",
            lambda row: (
                f"holds {ragged[row][1]} values where the header names {wanted} columns; "
                "add or remove values, and put a value that holds a comma in double quotes"
            ),
        )
        return kept, lines.__getitem__

    def _reader(self) -> Any:
        text = self.data.decode("utf-8")
        return csv.reader(io.StringIO(text, newline=""))


def open_csv(file: str, data: bytes, schema: TableSchema, faults: Faults) -> CsvText | None:
    """Check the text and the header of a CSV file; note the faults and return None if it is unsound."""
    data = data.removeprefix(UTF8_MARK)
    if not data.strip():
        faults.add(file, 0, "", f"is empty; begin it with the header {','.join(schema.names)}")
        return None
    for mark, encoding in OTHER_MARKS.items():
        if data.startswith(mark):
            faults.add(file, 1, "", f"is encoded in {encoding}; save it as UTF-8")
            return None
    at = data.find(b"\0")
    if at >= 0:
        faults.add(file, _line_at(data, at), "", "holds binary data; save the table as CSV text in UTF-8")
        return None
    try:
        data.decode("utf-8")
    except UnicodeDecodeError as error:
        line = _line_at(data, error.start)
        faults.add(file, line, "", f"holds the byte 0x{data[error.start]:02x}, not UTF-8; save it as UTF-8")
        return None
    ends = np.flatnonzero(np.frombuffer(data, dtype=np.uint8) == ord("\n"))
    edges = np.concatenate([[-1], ends, [len(data)]])
    longest = int(np.argmax(np.diff(edges)))
    if edges[longest + 1] - edges[longest] > LONGEST_LINE:
        faults.add(
            file,
            longest + 1,
            "",
            f"is longer than {LONGEST_LINE:,} bytes; check that lines end where records end",
        )
        return None
    try:
        header = tuple(name.strip() for name in next(csv.reader(io.StringIO(data.decode("utf-8"), newline=""))))
    except csv.Error as error:
        faults.add(file, 1, "", f"cannot be read as CSV ({error})")
        return None
    if not check_columns(file, 1, header, schema, faults):
        return None
    return CsvText(file, data, header)


def check_columns(file: str, line: int, header: tuple[str, ...], schema: TableSchema, faults: Faults) -> bool:
    """Compare the column names found with those declared; True if they can be read."""
    before = len(faults.found)
    if len(header) == 1 and any(mark in header[0] for mark in ";\t|"):
        faults.add(file, line, "", "the header has no commas; separate the columns by commas")
        return False
    for name in dict.fromkeys(name for name in header if header.count(name) > 1):
        faults.add(file, line, name, "the header names this column more than once; keep one")
    missing = [column.name for column in schema if not column.optional and column.name not in header]
    for name in dict.fromkeys(name for name in header if name not in schema.names):
        absent = [column.name for column in schema if column.name not in header]
        close = difflib.get_close_matches(name.lower(), absent, n=1, cutoff=0.5)
        mend = f"rename it to {close[0]}" if close else f"remove it (known are {', '.join(schema.names)})"
        faults.add(file, line, name or "(no name)", f"is not a column of this table; {mend}")
    for name in missing:
        faults.add(file, line, name, f"the column is missing; add it ({schema.column(name).description})")
    return len(faults.found) == before


def _line_at(data: bytes, position: int) -> int:
    return data.count(b"\n", 0, position) + 1
