"""The history table, CSV or Parquet, read lean: tens of millions of rows as typed arrays, every fault with its row.

CSV is read typed and in parallel by pyarrow. Only where a cell does not fit are the columns read again as text, to say
which ones; whole columns are judged at once in either case. What rows say together is judged in
`legworth.estimation.history_checks`.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from datetime import datetime
from pathlib import Path
from typing import Any, Literal

import numpy as np
import pyarrow as pa
import pyarrow.csv
import pyarrow.parquet

from legworth.estimation.history import BookingHistory
from legworth.estimation.history_cells import FALSE, TRUE, Cells, RawColumns, first_rows
from legworth.estimation.history_checks import check_sequences, snapshot_day
from legworth.estimation.readings import Readings
from network import Fault, InputError
from network.arrays import BoolArray, NameArray
from network.csv_text import CsvText, check_columns, read_csv_text
from network.faults import Faults
from network.schema import TableSchema, table_schema

__all__ = ["HistoryResult", "Unknown", "read_history"]

Unknown = Literal["fault", "drop", "keep"]
"""What becomes of itineraries of the history that the network does not know."""

TYPES: dict[str, pa.DataType] = {
    "date": pa.date32(),
    "string": pa.dictionary(pa.int32(), pa.string()),
    "number": pa.float64(),
    "integer": pa.int32(),
    "boolean": pa.bool_(),
}


@dataclass(frozen=True, eq=False)
class HistoryResult:
    """A history, what was odd about it, and its number of rows."""

    history: BookingHistory
    warnings: tuple[Fault, ...]
    rows: int


def read_history(
    path: Path,
    itinerary: NameArray,
    fare_classes: Sequence[str],
    as_of: datetime,
    unknown: Unknown = "fault",
    *,
    may_reopen: bool = False,
) -> HistoryResult:
    """Read a history table and hold it against itself and against a network.

    Parameters
    ----------
    path
        The table, CSV or Parquet.
    itinerary
        Names under which history may hold itineraries; repeats do no harm.
    fare_classes
        Names of the fare classes, best first.
    as_of
        Instant of the snapshot, with offset; no reading may lie after it.
    unknown
        What becomes of rows of other itineraries: a fault for each name, left out with a warning, or kept (they tell of
        classes and booking curves, and stand in no city pair).
    may_reopen
        Whether bookings between two readings at which the class was closed are odd only, and no fault.

    Returns
    -------
    HistoryResult
        The history, sorted; ``itinerary`` of it holds the names that the table uses.

    Raises
    ------
    InputError
        With every fault, each with its row.
    """
    schema = table_schema("legworth", "history")
    faults = Faults()
    if not path.is_file():
        raise InputError([Fault(str(path), 0, "", "there is no such file; name a table of booking history")])
    table = (_read_parquet if path.suffix == ".parquet" else _read_csv)(path, schema, faults)
    if table is not None and table.rows == 0 and not faults.errors:
        faults.add(table.file, 0, "", "has a header but no rows; add the readings")
    if table is None or table.rows == 0:
        raise InputError(faults.errors)
    readings, names = _typed(table, schema, np.asarray(fare_classes, dtype=object), faults)
    known = _known_itineraries(table, readings, names, itinerary, unknown, faults)
    faults.raise_errors()
    del table
    readings = readings.sorted(known)
    check_sequences(readings, snapshot_day(as_of), faults, may_reopen=may_reopen)
    faults.raise_errors()
    history = readings.history(names, tuple(fare_classes))
    return HistoryResult(history, tuple(faults.warnings), len(known))


def _read_csv(path: Path, schema: TableSchema, faults: Faults) -> RawColumns | None:
    text = read_csv_text(path, schema, faults)
    if text is None:
        return None
    doubtful = text.doubtful(schema)
    table = None if doubtful else _parse(text, schema, typed=True)
    if doubtful and b'"' in text.data:
        return _read_records(text, faults)
    skipped: list[int] = []
    if table is None:
        table = _parse(text, schema, typed=False, skipped=skipped)
    if table is None:
        return _read_records(text, faults)
    columns = {name: table[name] for name in text.header}
    if not skipped:
        return RawColumns(path.name, columns, text.line_of, table.num_rows)
    sound = np.setdiff1d(np.arange(table.num_rows + len(skipped)), skipped)
    wanted = f"holds another number of values than the {len(text.header)} columns of the header"
    problem = f"{wanted}; add or remove values, and put a value that holds a comma in double quotes"
    faults.add_rows(path.name, skipped, text.line_of, "", lambda _: problem)
    return RawColumns(path.name, columns, lambda row: text.line_of(int(sound[row])), table.num_rows)


def _read_records(text: CsvText, faults: Faults) -> RawColumns | None:
    """Read a file with odd quotes record by record, everything as text; records at fault as a whole are left out."""
    records = text.records(faults)
    if records is None:
        return None
    rows = np.flatnonzero(~np.array(records.ragged, dtype=bool))
    values = [records.values[row] for row in rows.tolist()]
    columns = {
        name: pa.chunked_array([pa.array([record[k] for record in values], pa.string())])
        for k, name in enumerate(text.header)
    }
    return RawColumns(text.file, columns, lambda row: records.line[int(rows[row])], len(rows))


def _parse(text: CsvText, schema: TableSchema, *, typed: bool, skipped: list[int] | None = None) -> pa.Table | None:
    """Parse CSV typed, None if a single value does not fit; or as text, leaving rows out that do not fit."""

    def skip(row: Any) -> str:
        assert skipped is not None
        skipped.append(row.number - 2)
        return "skip"

    types = {name: TYPES[schema.column(name).type] if typed else pa.string() for name in text.header}
    try:
        return pyarrow.csv.read_csv(
            pa.BufferReader(text.data),
            # Rows that do not fit have numbers only if they are read one after the other.
            read_options=pyarrow.csv.ReadOptions(
                column_names=list(text.header), skip_rows_after_names=1, use_threads=typed
            ),
            parse_options=pyarrow.csv.ParseOptions(
                newlines_in_values=b'"' in text.data, invalid_row_handler=None if typed else skip
            ),
            convert_options=pyarrow.csv.ConvertOptions(
                column_types=types,
                null_values=[""],
                true_values=list(TRUE),
                false_values=list(FALSE),
                strings_can_be_null=True,
                quoted_strings_can_be_null=True,
            ),
        )
    except pa.ArrowInvalid:
        return None


def _read_parquet(path: Path, schema: TableSchema, faults: Faults) -> RawColumns | None:
    text = [column.name for column in schema if column.type == "string"]
    try:
        table = pyarrow.parquet.read_table(path, partitioning=None, read_dictionary=text)
        names = tuple(table.column_names)
    except (pa.ArrowException, OSError, ValueError) as error:
        reason = next(iter(str(error).splitlines()), type(error).__name__)
        faults.add(path.name, 0, "", f"cannot be read as Parquet ({reason}); write it again, or give CSV")
        return None
    if not check_columns(path.name, 0, names, schema, faults):
        return None
    for name in names:
        kind = table.schema.field(name).type
        kind = kind.value_type if pa.types.is_dictionary(kind) else kind
        try:
            table[name].validate(full=True)
            pa.array([], type=kind).cast(pa.string())
            if pa.types.is_binary(kind):
                table[name].cast(pa.string())
        except (pa.ArrowException, ValueError) as error:
            reason = next(iter(str(error).splitlines()), type(error).__name__)
            faults.add(path.name, 0, name, f"holds values that cannot be taken ({reason}); write the column anew")
    if faults.errors:
        return None
    columns = {name: table[name] for name in names}
    return RawColumns(path.name, columns, lambda row: row + 1, table.num_rows)


def _typed(
    table: RawColumns, schema: TableSchema, fare_classes: NameArray, faults: Faults
) -> tuple[Readings, NameArray]:
    """Bring every column to its declared type; notes cells that cannot be, break a limit or name no class."""
    cells = Cells(table, schema, faults)
    itinerary, names = cells.names("itinerary")
    fare_class, class_names = cells.names("fare_class")
    lacking = cells.lacking("fare_class", fare_class, class_names, fare_classes)
    place = {name: position for position, name in enumerate(fare_classes.tolist())}
    of_name = np.array([place.get(name, -1) for name in class_names.tolist()], dtype=np.int16)
    cells.note_names(
        "fare_class", lacking, class_names, "is not a fare class of the network; correct it, or add it there"
    )
    readings = Readings(
        file=table.file,
        line_of=table.line_of,
        departure=cells.dates("departure"),
        itinerary=itinerary,
        fare_class=np.append(of_name, np.int16(-1))[fare_class],
        days_before=cells.figures(
            "days_before", "{} was read after departure, when no class is open; remove the row or correct it"
        ),
        booked=cells.figures("booked"),
        cancelled=cells.figures("cancelled") if "cancelled" in table.columns else None,
        open=cells.truths("open"),
        open_share=cells.figures("open_share") if "open_share" in table.columns else None,
        row=None,
    )
    return readings, names


def _known_itineraries(
    table: RawColumns, readings: Readings, names: NameArray, itinerary: NameArray, unknown: Unknown, faults: Faults
) -> BoolArray:
    """(R,) which rows are kept; notes names that the network does not know, each once, with its first row."""
    known = np.isin(names.astype(str), itinerary.astype(str)) if len(names) else np.zeros(0, dtype=bool)
    if unknown == "keep" or known.all():
        return np.ones(table.rows, dtype=bool)
    rows = np.bincount(readings.itinerary[readings.itinerary >= 0], minlength=len(names))
    first = first_rows(readings.itinerary, len(names))
    at = np.flatnonzero(~known & (rows > 0))
    at = at[np.argsort(first[at])]
    mend = (
        "it is left out"
        if unknown == "drop"
        else "correct the name, give it as history_name in itineraries.csv, or leave such rows out with --unknown drop"
    )
    faults.add_rows(
        table.file,
        at.tolist(),
        lambda name: table.line_of(int(first[name])),
        "itinerary",
        lambda name: f"{names[name]!r} ({rows[name]:,} rows) is no itinerary or history_name of the network; {mend}",
        warning=unknown == "drop",
    )
    return np.append(known, True)[readings.itinerary] if unknown == "drop" else np.ones(table.rows, dtype=bool)
