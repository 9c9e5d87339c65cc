"""CSV files as text: encoding, header and line numbers, with every fault named before any value is read."""

from __future__ import annotations

import csv
import difflib
import io
import re
from dataclasses import dataclass, field
from functools import cached_property
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from network.counted import counted
from network.faults import Faults
from network.schema import TableSchema

__all__ = ["LONGEST_LINE", "CsvText", "Records", "check_columns", "open_csv", "read_csv_text"]

LONGEST_LINE = 100_000
"""Bytes that one line may hold; anything longer is taken for a file that is not a table."""

UTF8_MARK = b"\xef\xbb\xbf"
OTHER_MARKS = {b"\xff\xfe": "UTF-16", b"\xfe\xff": "UTF-16"}
STRAY_QUOTE = re.compile(rb'(?<=[^,\r\n"])"(?=[^,\r\n"])')


@dataclass
class Records:
    """Records as text, cut or filled to the number of columns; the line of each, and whether it had to be."""

    values: list[list[str]] = field(default_factory=list)
    line: list[int] = field(default_factory=list)
    ragged: list[bool] = field(default_factory=list)


@dataclass(frozen=True)
class CsvText:
    """A CSV file whose text and header are sound."""

    file: str
    data: bytes
    header: tuple[str, ...]

    def doubtful(self, schema: TableSchema) -> bool:
        """Tell whether a fast reader may see other values than are written.

        That is so with stray quotes, and with hexadecimal figures, which it takes for whole numbers.
        """
        if any(column.type == "integer" for column in schema) and re.search(b"0[xX]", self.data):
            return True
        if b'"' not in self.data:
            return False
        return self.data.count(b'"') % 2 == 1 or STRAY_QUOTE.search(self.data) is not None

    @cached_property
    def record_lines(self) -> npt.NDArray[np.int64]:
        """Line on which every record after the header begins (blank lines hold no record)."""
        data, ends = np.frombuffer(self.data, dtype=np.uint8), _line_ends(self.data)
        quoted = np.searchsorted(np.flatnonzero(data == ord('"')), ends) % 2 == 1
        first, last = np.append(0, ends + 1), np.append(ends, len(data))
        length = last - first - ((last > first) & (data[last - 1] == ord("\r")))
        begins = ~np.append(False, quoted) & (length > 0)
        return np.flatnonzero(begins)[1:] + 1

    def line_of(self, row: int) -> int:
        """Line on which the record at position ``row`` begins."""
        return int(self.record_lines[row])

    def records(self, faults: Faults) -> Records | None:
        """Read records one by one, noting those with a wrong number of values; None if that is not possible."""
        reader = csv_reader(self.data)
        records = Records()
        wanted, found = len(self.header), []
        before = 0
        try:
            next(reader)
            before = reader.line_num
            for record in reader:
                if record:
                    records.values.append((record + [""] * wanted)[:wanted])
                    records.line.append(before + 1)
                    records.ragged.append(len(record) != wanted)
                    found.append(len(record))
                before = reader.line_num
        except csv.Error as error:
            faults.add(self.file, before + 1, "", f"cannot be read as CSV ({error}); look for a stray quote")
            return None
        faults.add_rows(
            self.file,
            [row for row, ragged in enumerate(records.ragged) if ragged],
            records.line.__getitem__,
            "",
            lambda row: (
                f"holds {counted(found[row], 'value')} where the header names {counted(wanted, 'column')}; "
                "add or remove values, and put a value that holds a comma in double quotes"
            ),
        )
        return records


def csv_reader(data: bytes) -> Any:
    """Reader of CSV text in UTF-8 that refuses quotes which do not close."""
    return csv.reader(io.TextIOWrapper(io.BytesIO(data), encoding="utf-8", newline=""), strict=True)


def read_csv_text(path: Path, schema: TableSchema, faults: Faults) -> CsvText | None:
    """Read a CSV file and check its text and header; note the faults and return None if it cannot be read or used."""
    try:
        data = path.read_bytes()
    except OSError as error:
        faults.add(path.name, 0, "", f"cannot be read ({error.strerror}); correct its permissions or give it anew")
        return None
    return open_csv(path.name, data, schema, faults)


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
    edges = np.concatenate([[-1], _line_ends(data), [len(data)]])
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
        header = tuple(name.strip() for name in next(csv_reader(data)))
    except csv.Error as error:
        faults.add(file, 1, "", f"cannot be read as CSV ({error}); look for a stray quote")
        return None
    if not header:
        faults.add(file, 1, "", f"is blank; put the header {','.join(schema.names)} there")
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
    return int(np.searchsorted(_line_ends(data), position)) + 1


def _line_ends(data: bytes) -> npt.NDArray[np.int64]:
    """Positions at which lines end: LF, or CR that no LF follows."""
    codes = np.frombuffer(data, dtype=np.uint8)
    feed = codes == ord("\n")
    if b"\r" in data:
        feed |= (codes == ord("\r")) & ~np.append(feed[1:], False)
    return np.flatnonzero(feed)
