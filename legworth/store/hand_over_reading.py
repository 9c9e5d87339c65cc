"""Reading a hand-over: verified whole, or not at all."""

from __future__ import annotations

import json
import re
from collections.abc import Iterator
from dataclasses import dataclass
from datetime import datetime
from pathlib import Path

import pyarrow as pa
import pyarrow.csv
import pyarrow.parquet as pq

from legworth.store.disk import file_digest, one_line_errors
from legworth.store.hand_over import NOTE, SUMS, stem_table
from network.errors import NightDamagedError, StoreError

__all__ = ["HandOver", "read_hand_over"]

LINE = re.compile(r"([0-9a-f]{64})  (\S.*)")


@dataclass(frozen=True)
class HandOver:
    """A hand-over that was whole when it was read.

    Attributes
    ----------
    folder
        Where it lies.
    night
        Name of the night.
    valid_from
        Instant from which its prices are in force.
    rows
        Rows by table.
    files
        Its files but the two that list them, sorted.
    """

    folder: Path
    night: str
    valid_from: datetime
    rows: dict[str, int]
    files: tuple[str, ...]

    def batches(self, table: str) -> Iterator[pa.RecordBatch]:
        """Rows of a table, some at a time, from Parquet where there is any, else from CSV.

        Raises
        ------
        StoreError
            If there is no such table.
        """
        found = [path for path in self.files if stem_table(path) == table]
        for ending in (".parquet", ".csv"):
            chosen = [path for path in found if path.endswith(ending)]
            if chosen:
                break
        else:
            raise StoreError(f"the hand-over in {self.folder} has no table {table!r}")
        for path in chosen:
            if ending == ".parquet":
                with pq.ParquetFile(self.folder / path) as file:
                    yield from file.iter_batches()
            else:
                with pyarrow.csv.open_csv(self.folder / path) as reader:
                    yield from reader


def read_hand_over(folder: Path | str) -> HandOver:
    """Verify a hand-over and say what it holds.

    Every file must be there with its checksum, the list of checksums must be whole, and it must name the files that
    the note names, no fewer. Copy a hand-over first and verify the copy: another may replace it meanwhile.

    Raises
    ------
    NightDamagedError
        If it is not whole.
    """
    folder = Path(folder)

    def broken(why: str) -> NightDamagedError:
        return NightDamagedError(f"the hand-over in {folder} is not whole: {why}; copy it again")

    with one_line_errors(folder, "read"):
        try:
            text = (folder / SUMS).read_bytes().decode()
        except FileNotFoundError:
            raise broken(f"{SUMS}, which is written last, is missing") from None
        except UnicodeDecodeError:
            raise broken(f"{SUMS} is damaged") from None
        lines = [LINE.fullmatch(line) for line in text.split("\n")[:-1]]
        sums = {line[2]: line[1] for line in lines if line}
        if not text.endswith("\n") or not all(lines) or list(sums)[-1:] != [NOTE] or len(sums) != len(lines):
            raise broken(f"{SUMS} is cut short or damaged")
        for path, expected in sums.items():
            try:
                found = file_digest(folder / path)
            except (FileNotFoundError, NotADirectoryError):
                raise broken(f"{path} is missing") from None
            except (ValueError, IsADirectoryError):
                raise broken(f"{SUMS} names {path!r}, which is no file") from None
            if found != expected:
                raise broken(f"{path} is cut short or changed")
    try:
        note = json.loads((folder / NOTE).read_bytes())
        files = tuple(sorted(note["files"]))
        found_here = HandOver(folder, note["night"], datetime.fromisoformat(note["valid_from"]), note["rows"], files)
    except (ValueError, KeyError, TypeError, RecursionError):
        raise broken(f"{NOTE} is not that of a hand-over") from None
    if files != tuple(sorted(set(sums) - {NOTE})):
        raise broken(f"{SUMS} does not name the files that {NOTE} names")
    return found_here
