"""The hand-over to an inventory system: prices as CSV and Parquet, a list of checksums written last.

A hand-over is whole only with its ``SHA256SUMS``, which ``sha256sum -c`` reads. It is taken away before the first
file of an earlier hand-over is replaced, and written when everything else is on the disk, so that one cut short
anywhere, here or by whoever copies it on, is known as such.
"""

from __future__ import annotations

import hashlib
import json
import os
import re
import shutil
from collections.abc import Callable, Iterable, Iterator, Sequence
from contextlib import ExitStack, contextmanager
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path
from typing import Literal, Protocol

import filelock
import pyarrow as pa
import pyarrow.compute
import pyarrow.csv
import pyarrow.parquet as pq

from legworth.results import result_schemas
from legworth.store.disk import file_digest, held_folder, one_line_errors, sync, sync_all
from legworth.store.night import Night
from legworth.store.tables import part_folder
from network.errors import NightDamagedError, StoreBusyError, StoreError

__all__ = ["FORMATS", "NOTE", "SUMS", "TABLES", "HandOverFormat", "HandOverOptions", "hand_over", "stem_table"]

HandOverFormat = Literal["csv", "parquet"]
FORMATS: tuple[HandOverFormat, ...] = ("csv", "parquet")
TABLES = ("bid_prices", "price_curves")
SUMS, NOTE = "SHA256SUMS", "hand_over.json"
LOCK, ASIDE = ".lock", ".unfinished"
ROWS = 1 << 17
"""Rows held in memory at a time, and those of a row group."""

ARROW = {"string": pa.string(), "number": pa.float64(), "integer": pa.int64()}


@dataclass(frozen=True)
class HandOverOptions:
    """How a night is handed over: in which formats, and whether every part gets a file of its own."""

    formats: tuple[HandOverFormat, ...] = FORMATS
    by_part: bool = False


class _Writer(Protocol):
    def write_table(self, table: pa.Table) -> None: ...
    def close(self) -> None: ...


class _HashedFile:
    """A file that is written front to back without a buffer, and its SHA-256 as it grows.

    Without a buffer a full disk is met while writing, where the error is passed on, and not while closing.
    """

    def __init__(self, path: Path) -> None:
        self._file = path.open("xb", buffering=0)
        self._hash = hashlib.sha256()
        self._length = 0
        self.closed = False

    def write(self, data: bytes) -> int:
        rest = memoryview(data)
        while rest:
            rest = rest[self._file.write(rest) :]
        self._hash.update(data)
        self._length += len(data)
        return len(data)

    def flush(self) -> None:
        self._file.flush()

    def tell(self) -> int:
        return self._length

    def close(self) -> None:
        self._file.close()
        self.closed = True

    def sha256(self) -> str:
        return self._hash.hexdigest()


def hand_over(
    night: Night,
    folder: Path | str,
    valid_from: datetime,
    options: HandOverOptions | None = None,
    progress: Callable[[int, int], None] | None = None,
) -> dict[str, int]:
    """Write the prices of a night for an inventory system, part by part.

    Parameters
    ----------
    night
        The night.
    folder
        Where to: a folder that is new, empty, or holds an earlier hand-over, which is replaced.
    valid_from
        Instant from which the prices are in force, with offset.
    options
        How.
    progress
        Called with the parts written so far, counted once a table, and those in all.

    Returns
    -------
    dict
        Rows by table.

    Raises
    ------
    StoreError
        If the night has no bid prices, the folder holds anything else, or the disk is full.
    NightDamagedError
        If a file of the night is not as it was published, or a table not as its schema declares it.
    """
    folder, options = Path(folder), options or HandOverOptions()
    tables = [table for table in TABLES if table in night.manifest.rows]
    if TABLES[0] not in tables:
        raise StoreError(f"night {night.name} has no bid prices to hand over")
    with one_line_errors(folder, "write to"), ExitStack() as stack:
        folder.mkdir(parents=True, exist_ok=True)
        _check_is_ours(folder)
        try:
            stack.enter_context(filelock.FileLock(folder / LOCK, timeout=0))
        except filelock.Timeout:
            raise StoreBusyError(f"another process is writing to {folder}; wait until it has ended") from None
        aside = folder / ASIDE
        shutil.rmtree(aside, ignore_errors=True)
        stack.callback(shutil.rmtree, aside, ignore_errors=True)
        aside.mkdir()
        rows, files = _write_tables(night, tables, aside, valid_from, options, progress or (lambda done, total: None))
        _write_sums(aside, night, valid_from, rows, files)
        sync_all(path for path in sorted(aside.rglob("*"), reverse=True))
        _replace(folder, aside)
    return rows


def stem_table(path: str) -> str | None:
    """Table that a file of a hand-over holds, by its path; None if it is no such file."""
    table = re.split(r"[./]", path, maxsplit=1)[0]
    return table if table in TABLES else None


def _check_is_ours(folder: Path) -> None:
    ours = {SUMS, NOTE, LOCK, ASIDE}
    for path in sorted(folder.iterdir()):
        if path.name not in ours and stem_table(path.name) is None:
            raise StoreError(f"{folder} holds {path.name}, which is no part of a hand-over; name an empty folder")


def _write_tables(
    night: Night,
    tables: Sequence[str],
    aside: Path,
    valid_from: datetime,
    options: HandOverOptions,
    progress: Callable[[int, int], None],
) -> tuple[dict[str, int], dict[str, str]]:
    """Write all tables; return rows by table and SHA-256 by file."""
    parts, rows, files = night.parts(), dict.fromkeys(tables, 0), dict[str, str]()
    quoted = _needs_quotes(night)
    done = 0

    def told(part: str) -> str:
        nonlocal done
        progress(done := done + 1, len(parts) * len(tables))
        return part

    for table in tables:
        pieces = [(f"{table}/{part}", [part]) for part in parts] if options.by_part else [(table, list(parts))]
        for stem, members in pieces:
            (aside / stem).parent.mkdir(exist_ok=True)
            chunks = (chunk for part in members for chunk in _chunks(night, table, told(part)))
            written, sums = _write_files(
                aside, stem, _gathered(chunks), _layout(table), night, valid_from, options, quoted
            )
            rows[table] += written
            files |= sums
    if rows != {table: night.manifest.rows[table] for table in tables}:
        raise NightDamagedError(f"night {night.name} does not have the rows that its manifest says")
    return rows, files


def _layout(table: str) -> pa.Schema:
    """Columns of a table as they are declared, in Arrow types."""
    return pa.schema([(column.name, ARROW[column.type]) for column in result_schemas()[table]])


def _chunks(night: Night, table: str, part: str) -> Iterator[pa.Table]:
    """Rows of one part, some at a time, with the columns declared; nothing where the part has no such table."""
    layout = _layout(table)
    with _sound_file(night, table, part) as file:
        if file is not None:
            for batch in file.iter_batches(ROWS, columns=layout.names):
                yield pa.Table.from_batches([batch]).select(layout.names).cast(layout)


@contextmanager
def _sound_file(night: Night, table: str, part: str) -> Iterator[pq.ParquetFile | None]:
    """Open the file of a table once it is known to be the one that was published; None if the part has none.

    Parquet files carry no checksums of their own: one wrong bit would be handed over as a wrong price.
    """
    path = f"{part_folder(part)}/{table}.parquet"
    entry = night.manifest.files.get(path)
    if entry is None:
        yield None
        return
    try:
        if file_digest(night.folder / path) != entry.sha256:
            raise _damaged(night, f"{path} has been changed since it was published")
        with pq.ParquetFile(night.folder / path) as file:
            yield file
    except FileNotFoundError:
        raise _damaged(night, f"{path} is missing") from None
    except (OSError, KeyError, pa.ArrowInvalid) as error:
        raise _damaged(night, f"{path} cannot be read ({str(error).splitlines()[0]})") from error


def _damaged(night: Night, what: str) -> NightDamagedError:
    return NightDamagedError(
        f"night {night.name} is damaged and not handed over: {what}; see what is sound with `legworth nights verify`, "
        "and hand over a sound night with --night, or once `legworth nights restore` has put it in force"
    )


def _gathered(chunks: Iterable[pa.Table]) -> Iterator[pa.Table]:
    """Put small chunks together, so that small parts make no small row groups."""
    held: list[pa.Table] = []
    for chunk in chunks:
        held.append(chunk)
        if sum(table.num_rows for table in held) >= ROWS:
            yield pa.concat_tables(held)
            held = []
    if held:
        yield pa.concat_tables(held)


def _write_files(
    aside: Path,
    stem: str,
    chunks: Iterable[pa.Table],
    layout: pa.Schema,
    night: Night,
    valid_from: datetime,
    options: HandOverOptions,
    quoted: bool,
) -> tuple[int, dict[str, str]]:
    """Write one file in every format; return its rows and SHA-256 by file."""
    instant = valid_from.astimezone(UTC)
    stamps = {
        "csv": pa.scalar(instant.strftime("%Y-%m-%dT%H:%M:%SZ")),
        "parquet": pa.scalar(instant.replace(microsecond=0), pa.timestamp("ms", "UTC")),
    }
    rows = 0
    sinks: dict[HandOverFormat, _HashedFile] = {}
    with ExitStack() as stack:
        writers: dict[HandOverFormat, _Writer] = {}
        for form in options.formats:
            sinks[form] = _HashedFile(aside / f"{stem}.{form}")
            stack.callback(sinks[form].close)
            head = pa.schema([("night", pa.string()), ("valid_from", stamps[form].type)])
            writers[form] = _writer(form, sinks[form], pa.schema([*head, *layout]), quoted)
            stack.callback(writers[form].close)
        for chunk in chunks:
            rows += chunk.num_rows
            for form, writer in writers.items():
                labels = [pa.repeat(value, chunk.num_rows) for value in (pa.scalar(night.name), stamps[form])]
                columns = [*labels, *chunk.columns]
                writer.write_table(pa.Table.from_arrays(columns, ["night", "valid_from", *chunk.column_names]))
    return rows, {f"{stem}.{form}": sink.sha256() for form, sink in sinks.items()}


def _writer(form: HandOverFormat, sink: _HashedFile, schema: pa.Schema, quoted: bool) -> _Writer:
    if form == "parquet":
        writer: _Writer = pq.ParquetWriter(sink, schema, compression="zstd")
        return writer
    style = pyarrow.csv.WriteOptions(quoting_style="needed" if quoted else "none")
    lines: _Writer = pyarrow.csv.CSVWriter(sink, schema, write_options=style)
    return lines


def _needs_quotes(night: Night) -> bool:
    """Whether any leg has a name that CSV must put in quotes."""
    return any(_has_odd_names(night, part) for part in night.parts())


def _has_odd_names(night: Night, part: str) -> bool:
    with _sound_file(night, TABLES[0], part) as file:
        if file is None:
            return False
        names = file.read(columns=["leg"])["leg"].cast(pa.string())
    return bool(pyarrow.compute.any(pyarrow.compute.match_substring_regex(names, r'[",\r\n]')).as_py())


def _write_sums(aside: Path, night: Night, valid_from: datetime, rows: dict[str, int], files: dict[str, str]) -> None:
    """Write the note that names all files, and the checksums with the note's last, so that no line can be missed."""
    note = {
        "night": night.name,
        "as_of": night.manifest.as_of.isoformat(),
        "valid_from": valid_from.astimezone(UTC).strftime("%Y-%m-%dT%H:%M:%SZ"),
        "rows": rows,
        "files": sorted(files),
    }
    data = (json.dumps(note, indent=1, ensure_ascii=False) + "\n").encode()
    (aside / NOTE).write_bytes(data)
    sums = {**dict(sorted(files.items())), NOTE: hashlib.sha256(data).hexdigest()}
    text = "".join(f"{value}  {path}\n" for path, value in sums.items())
    (aside / SUMS).write_text(text, encoding="utf-8", newline="\n")


def _replace(folder: Path, aside: Path) -> None:
    """Put a finished hand-over in the place of an earlier one: its checksums go first, the new ones come last."""
    with held_folder(folder) as handle:
        (folder / SUMS).unlink(missing_ok=True)
        sync(folder)
        for path in folder.iterdir():
            if path.name in (LOCK, ASIDE):
                continue
            if path.is_dir():
                shutil.rmtree(path)
            else:
                path.unlink()
        for path in sorted(aside.iterdir()):
            if path.name != SUMS:
                path.rename(folder / path.name)
        sync(folder)
        (aside / SUMS).rename(folder / SUMS)
        if handle is not None:
            os.fsync(handle)
