"""An airline schedule file as records: their length, signs, order and serial numbers."""

from __future__ import annotations

from collections.abc import Callable, Iterable
from dataclasses import dataclass
from functools import cached_property

import numpy as np
import numpy.typing as npt

from legworth.schedules.ssim_layout import HEADER, LENGTH, TITLE, TRAILER, Field, field_at
from network.arrays import BoolArray, IntArray
from network.faults import Faults

__all__ = ["SsimRecords", "read_records"]

GREATEST_SERIAL = 999_999
FOLLOWS = {"": "1", "1": "2", "2": "35", "3": "345", "4": "345", "5": "2"}
"""Record types that may follow each."""


@dataclass(frozen=True, eq=False)
class SsimRecords:
    """Records by position: (n, 200) bytes, the line of each, and its place among all that are not filling."""

    file: str
    content: npt.NDArray[np.uint8]
    line: IntArray
    place: IntArray

    def __len__(self) -> int:
        return len(self.line)

    @cached_property
    def type(self) -> npt.NDArray[np.bytes_]:
        """(n,) record type, one byte each."""
        return np.ascontiguousarray(self.content[:, 0]).view("S1")

    def take(self, rows: IntArray | BoolArray) -> SsimRecords:
        """Return some of the records."""
        return SsimRecords(self.file, self.content[rows], self.line[rows], self.place[rows])

    def text(self, field: Field) -> npt.NDArray[np.bytes_]:
        """(n,) bytes of a field."""
        part = np.ascontiguousarray(self.content[:, field.first - 1 : field.last])
        return part.view(f"S{field.width}").ravel()

    def note(
        self, faults: Faults, rows: Iterable[int], column: str, problem: Callable[[int], str], *, warning: bool = False
    ) -> None:
        """Note one fault of the same kind for each row position."""
        faults.add_rows(self.file, rows, lambda row: int(self.line[row]), column, problem, warning=warning)


def read_records(file: str, data: bytes, faults: Faults) -> SsimRecords | None:
    """Cut a file into records and check what holds for all of them.

    Records stand one a line, or one after the other without line ends. Records of zeros, which fill blocks, are left
    out and not counted.

    Returns
    -------
    SsimRecords or None
        The records that have 200 printable bytes, in file order; None if there are none.
    """
    start, length, line = _lines(data)
    full = length == LENGTH
    short = np.flatnonzero(~full)
    mend = "export the file again without cutting or padding lines"
    faults.add_rows(
        file,
        short,
        lambda at: int(line[at]),
        "",
        lambda at: f"holds {length[at]:,} bytes where a record has {LENGTH}; {mend}",
    )
    codes = np.frombuffer(data, dtype=np.uint8)
    content = np.zeros((0, LENGTH), dtype=np.uint8)
    if full.any():
        content = np.lib.stride_tricks.sliding_window_view(codes, LENGTH)[start[full]]
    filling = (content == ord("0")).all(axis=1)
    counted = np.ones(len(line), dtype=bool)
    counted[np.flatnonzero(full)[filling]] = False
    place = np.cumsum(counted)
    records = SsimRecords(file, content, line[full], place[full]).take(~filling)
    if len(records) == 0:
        if not len(short):
            faults.add(file, 0, "", "holds no record; give a file of 200-byte records")
        return None
    _check_order(records, int(place[-1]), faults)
    _check_serials(records, faults)
    printable = _check_signs(records, faults)
    return records.take(printable)


def _lines(data: bytes) -> tuple[IntArray, IntArray, IntArray]:
    """Start, length and number of every line that is not blank; of records without line ends, their own number."""
    codes = np.frombuffer(data, dtype=np.uint8)
    if b"\n" not in data and b"\r" not in data:
        start = np.arange(0, len(data), LENGTH)
        return start, np.minimum(LENGTH, len(data) - start), np.arange(1, len(start) + 1)
    feed = codes == ord("\n")
    if b"\r" in data:
        feed |= (codes == ord("\r")) & ~np.append(feed[1:], False)
    ends = np.append(np.flatnonzero(feed), len(codes))
    start = np.append(0, ends[:-1] + 1)
    length = ends - start
    length = length - ((length > 0) & (codes[np.maximum(ends - 1, 0)] == ord("\r")) & (ends < len(codes)))
    kept = length > 0
    return start[kept], length[kept], np.flatnonzero(kept) + 1


def _check_order(records: SsimRecords, total: int, faults: Faults) -> None:
    """Note records that may not stand where they stand."""
    types = np.char.decode(records.type, "latin-1")
    before = np.append("", types[:-1])
    adjacent = np.diff(records.place, prepend=0) == 1
    allowed = np.zeros(len(types), dtype=bool)
    for first, followers in FOLLOWS.items():
        allowed |= (before == first) & np.isin(types, list(followers))
    known = np.isin(types, list("12345"))
    column = field_at("1", 1)
    records.note(
        faults,
        np.flatnonzero(~known),
        column,
        lambda row: f"{_quoted(types[row])} is no record type; it must be 1, 2, 3, 4 or 5",
    )
    # A trailer that ends the file may be followed by nothing; that is said below.
    wrong = known & adjacent & ~allowed & np.isin(before, list(FOLLOWS))

    def misplaced(row: int) -> str:
        after = f"follow one of type {before[row]}" if before[row] else "begin the file"
        wanted = " or ".join(FOLLOWS[str(before[row])])
        return f"a record of type {types[row]} may not {after}; type {wanted} is expected here"

    records.note(faults, np.flatnonzero(wrong), column, misplaced)
    codes = records.text(TRAILER["continuation_code"])
    trailers = np.flatnonzero(types == "5")
    last = trailers == len(types) - 1
    bad = trailers[np.where(last, codes[trailers] != b"E", codes[trailers] != b"C")]
    records.note(
        faults,
        bad,
        TRAILER["continuation_code"].column,
        lambda row: (
            (
                f"{_quoted(codes[row])} must be "
                + ("E, as the file ends here" if row == len(types) - 1 else "C, as more records follow")
            )
            + "; correct it, or give the whole file"
        ),
    )
    if types[-1] != "5" and records.place[-1] == total:
        records.note(
            faults, [len(types) - 1], column, lambda _: "the file ends without a trailer (type 5); give all of it"
        )
    if types[0] == "1" and records.text(HEADER["title_of_contents"])[0] != TITLE.encode():
        found = _quoted(records.text(HEADER["title_of_contents"])[0])
        records.note(
            faults, [0], HEADER["title_of_contents"].column, lambda _: f"{found} must be {TITLE!r}; check the format"
        )


def _check_serials(records: SsimRecords, faults: Faults) -> None:
    """Note serial numbers that do not go up by one.

    After 999999 they go on with 000001 or 000002 (from memory).
    """
    field = HEADER["record_serial_number"]
    digits = records.content[:, field.first - 1 : field.last].astype(np.int64) - ord("0")
    numeric: BoolArray = np.all((digits >= 0) & (digits <= 9), axis=1)
    serial = digits @ 10 ** np.arange(5, -1, -1)
    records.note(
        faults,
        np.flatnonzero(~numeric),
        field.column,
        lambda row: (
            f"{_quoted(records.text(field)[row])} is not a number of six digits; number the records from 000001"
        ),
    )
    step = np.diff(records.place, prepend=0)
    expected = np.append(0, serial[:-1]) + step
    after_greatest = (expected > GREATEST_SERIAL) & np.isin(serial - (expected - GREATEST_SERIAL), [0, 1])
    comparable = numeric & np.append(True, numeric[:-1])
    records.note(
        faults,
        np.flatnonzero(comparable & (serial != expected) & ~after_greatest),
        field.column,
        lambda row: f"{serial[row]:06d} must be {expected[row]:06d}; a record is missing, doubled or misplaced",
    )
    check = TRAILER["serial_number_check_reference"]
    trailers = np.flatnonzero((records.type == b"5") & comparable & (step == 1))
    trailers = trailers[trailers > 0]
    references = records.text(check)[trailers]
    wanted = [f"{number:06d}".encode() for number in serial[trailers - 1]]
    wrong = [at for at, (found, right) in enumerate(zip(references, wanted, strict=True)) if found != right]
    faults.add_rows(
        records.file,
        wrong,
        lambda at: int(records.line[trailers[at]]),
        check.column,
        lambda at: f"{_quoted(references[at])} must be {wanted[at].decode()}, as in the record before; correct it",
    )


def _check_signs(records: SsimRecords, faults: Faults) -> BoolArray:
    """Note bytes that are not printable ASCII, the first of each record; True where there are none."""
    strange = (records.content < 32) | (records.content > 126)
    rows = np.flatnonzero(np.any(strange, axis=1))
    at = strange[rows].argmax(axis=1)
    by_column: dict[str, list[int]] = {}
    for row, byte in zip(rows.tolist(), at.tolist(), strict=True):
        column = field_at(chr(records.content[row, 0]), byte + 1)
        by_column.setdefault(column, []).append(row)
    first = dict(zip(rows.tolist(), at.tolist(), strict=True))
    for column, found in by_column.items():
        records.note(
            faults,
            found,
            column,
            lambda row: (
                f"holds the byte 0x{records.content[row, first[row]]:02x} at {first[row] + 1}, which is no printable "
                "ASCII sign; write plain letters"
            ),
        )
    sound: BoolArray = np.ones(len(records), dtype=bool)
    sound[rows] = False
    return sound


def _quoted(value: object) -> str:
    text = value.decode("ascii", "backslashreplace") if isinstance(value, bytes) else str(value)
    return repr(text)
