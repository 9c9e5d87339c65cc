"""Tables of a network folder, read whole and checked column by column against their schemas.

CSV is read typed and in parallel by pyarrow. Only where that fails are the records read again one by
one, to say which cell of which line is at fault. Parquet files of the same columns are read as well.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.csv
import pyarrow.parquet
from pandera.errors import SchemaErrors

from network.csv_text import CsvText, check_columns, open_csv
from network.faults import Faults
from network.schema import Column, TableSchema

__all__ = ["TableData", "read_table"]

INSTANT = r"(\d{4}-\d{2}-\d{2})[T ](\d{2}:\d{2})(?::(\d{2})(?:\.\d+)?)?(Z|[+-]\d{2}:?\d{2})?"


@dataclass(frozen=True)
class TableData:
    """One table as read.

    ``frame`` holds numbers as float64 or int64, text as categories, and every datetime column as two:
    the instant in UTC and, under the name with ``_offset``, its offset in minutes. ``line_of`` gives
    the line (CSV) or row (Parquet) of a row position.
    """

    schema: TableSchema
    file: str
    frame: pd.DataFrame
    line_of: Callable[[int], int]

    def __len__(self) -> int:
        return len(self.frame)


def read_table(folder: Path, schema: TableSchema, faults: Faults) -> TableData | None:
    """Read one table of a network folder.

    Parameters
    ----------
    folder
        The network folder.
    schema
        Which table, and what its columns must be.
    faults
        Receives every fault found.

    Returns
    -------
    TableData or None
        None if the table is absent or cannot be read at all; a table with single faulty cells is
        returned with those cells empty, so that other checks can go on.
    """
    path = _locate(folder, schema, faults)
    if path is None:
        return None
    read = _read_parquet if path.suffix == ".parquet" else _read_csv
    table = read(path, schema, faults)
    if table is None:
        return None
    if len(table) == 0:
        faults.add(path.name, 0, "", "has a header but no rows; add rows, or remove the file if it is optional")
        return None
    return table


def _locate(folder: Path, schema: TableSchema, faults: Faults) -> Path | None:
    found = [path for suffix in ("csv", "parquet") if (path := folder / f"{schema.name}.{suffix}").exists()]
    if len(found) > 1:
        faults.add(found[0].name, 0, "", f"stands beside {found[1].name}; keep one of the two")
        return None
    if not found:
        if not schema.optional:
            name = f"{schema.name}.csv"
            faults.add(name, 0, "", f"the table is missing; add {name} or {schema.name}.parquet")
        return None
    if not found[0].is_file():
        faults.add(found[0].name, 0, "", "is not a file; put the table in its place")
        return None
    return found[0]


def _read_csv(path: Path, schema: TableSchema, faults: Faults) -> TableData | None:
    try:
        data = path.read_bytes()
    except OSError as error:
        faults.add(path.name, 0, "", f"cannot be read ({error.strerror})")
        return None
    text = open_csv(path.name, data, schema, faults)
    if text is None:
        return None
    try:
        table = _parse_typed(text, schema)
    except pa.ArrowInvalid:
        records, line_of = text.records(faults)
        columns = list(zip(*records, strict=True)) if records else [()] * len(text.header)
        raw = {
            name: pd.Series(values, dtype="str").replace("", None)
            for name, values in zip(text.header, columns, strict=True)
        }
        return _typed(raw, schema, path.name, line_of, faults)
    raw = {name: table[name].to_pandas() for name in text.header}
    return _typed(raw, schema, path.name, text.line_of, faults)


def _parse_typed(text: CsvText, schema: TableSchema) -> pa.Table:
    """Parse CSV with the declared types; pyarrow.ArrowInvalid if a single value does not fit."""
    types = {
        "number": pa.float64(),
        "integer": pa.int64(),
        "string": pa.dictionary(pa.int32(), pa.string()),
        "datetime": pa.string(),
    }
    return pyarrow.csv.read_csv(
        pa.BufferReader(text.data),
        read_options=pyarrow.csv.ReadOptions(column_names=list(text.header), skip_rows_after_names=1),
        parse_options=pyarrow.csv.ParseOptions(newlines_in_values=b'"' in text.data),
        convert_options=pyarrow.csv.ConvertOptions(
            column_types={name: types[schema.column(name).type] for name in text.header},
            null_values=[""],
            strings_can_be_null=True,
            quoted_strings_can_be_null=True,
        ),
    )


def _read_parquet(path: Path, schema: TableSchema, faults: Faults) -> TableData | None:
    try:
        table = pyarrow.parquet.read_table(path)
    except (pa.ArrowInvalid, OSError) as error:
        reason = str(error).splitlines()[0]
        faults.add(path.name, 0, "", f"cannot be read as Parquet ({reason}); write it again, or give CSV")
        return None
    if not check_columns(path.name, 0, tuple(table.column_names), schema, faults):
        return None
    raw = {}
    for name in table.column_names:
        values = table[name]
        if schema.column(name).type == "string" and not pa.types.is_dictionary(values.type):
            values = values.cast(pa.string()).dictionary_encode()
        raw[name] = values.to_pandas()
    return _typed(raw, schema, path.name, lambda row: row + 1, faults)


def _typed(
    raw: dict[str, pd.Series], schema: TableSchema, file: str, line_of: Callable[[int], int], faults: Faults
) -> TableData:
    """Bring every column to its declared type and check its limits and the key."""
    columns: dict[str, pd.Series | np.ndarray] = {}
    reported: dict[str, np.ndarray] = {}
    length = len(next(iter(raw.values())))
    for column in schema:
        values = raw.get(column.name)
        if values is None:
            values = pd.Series(np.full(length, np.nan)) if column.numeric else pd.Series([None] * length, dtype="str")
        if column.numeric:
            columns[column.name], reported[column.name] = _numbers(values, column, file, line_of, faults)
        elif column.type == "datetime":
            instants, offsets, reported[column.name] = _instants(values, column, file, line_of, faults)
            columns[column.name], columns[f"{column.name}_offset"] = instants, offsets
        else:
            columns[column.name] = values.astype("category")
            reported[column.name] = np.zeros(length, dtype=bool)
    table = TableData(schema, file, pd.DataFrame(columns), line_of)
    _check_limits(table, reported, faults)
    _check_key(table, faults)
    return table


def _numbers(
    values: pd.Series, column: Column, file: str, line_of: Callable[[int], int], faults: Faults
) -> tuple[pd.Series, np.ndarray]:
    if pd.api.types.is_numeric_dtype(values) and not pd.api.types.is_bool_dtype(values):
        numbers = values.astype("float64") if column.type == "number" else values
    else:
        numbers = pd.to_numeric(values, errors="coerce").astype("float64")
    bad = (values.notna() & numbers.isna()).to_numpy()
    wanted = "number" if column.type == "number" else "whole number"
    if column.type == "integer" and pd.api.types.is_float_dtype(numbers):
        bad |= (numbers.notna() & (numbers != np.floor(numbers))).to_numpy()
        bad |= np.isinf(numbers.to_numpy())
        numbers = numbers.mask(bad)
    faults.add_rows(
        file,
        np.flatnonzero(bad),
        line_of,
        column.name,
        lambda row: f"{_quote(values.iloc[row])} is not a {wanted}; write digits with a point for decimals",
    )
    return numbers, bad


def _instants(
    values: pd.Series, column: Column, file: str, line_of: Callable[[int], int], faults: Faults
) -> tuple[pd.Series, np.ndarray, np.ndarray]:
    if isinstance(values.dtype, pd.DatetimeTZDtype):
        local = values.dt.tz_localize(None).to_numpy(dtype="datetime64[s]")
        utc = values.dt.tz_convert("UTC").dt.tz_localize(None)
        offsets = (local - utc.to_numpy(dtype="datetime64[s]")).astype(np.int64) // 60
        return (
            utc.astype("datetime64[s]"),
            np.where(values.isna(), 0, offsets),
            np.zeros(len(values), dtype=bool),
        )
    text = values.astype("str")
    parts = text.str.strip().str.extract(f"^{INSTANT}$")
    stamp = parts[0] + "T" + parts[1] + ":" + parts[2].fillna("00")
    local_time = pd.to_datetime(stamp, format="%Y-%m-%dT%H:%M:%S", errors="coerce")
    present = values.notna().to_numpy()
    unreadable = present & local_time.isna().to_numpy()
    without = present & ~unreadable & parts[3].isna().to_numpy()
    sign = np.where(parts[3].str[0] == "-", -1, 1)
    digits = parts[3].fillna("Z").replace("Z", "+00:00").str.replace(":", "")
    minutes = sign * (digits.str[1:3].astype(int) * 60 + digits.str[3:5].astype(int)).to_numpy()
    example = "write it as 2027-03-01T06:40+01:00"
    faults.add_rows(
        file,
        np.flatnonzero(unreadable),
        line_of,
        column.name,
        lambda row: f"{_quote(values.iloc[row])} is not a date and time; {example}",
    )
    faults.add_rows(
        file,
        np.flatnonzero(without),
        line_of,
        column.name,
        lambda row: f"{_quote(values.iloc[row])} has no offset from UTC; {example}",
    )
    utc = local_time - pd.to_timedelta(minutes, unit="min")
    return utc.astype("datetime64[s]").mask(without), minutes, unreadable | without


def _check_limits(table: TableData, reported: dict[str, np.ndarray], faults: Faults) -> None:
    """Note every cell that breaks a limit which its schema declares."""
    try:
        table.schema.checks.validate(table.frame, lazy=True)
    except SchemaErrors as errors:
        cases = errors.failure_cases
    else:
        return
    for (name, check), group in cases.groupby(["column", "check"], sort=False):
        column = table.schema.column(str(name))
        rows = np.sort(group["index"].to_numpy(dtype=np.int64))
        rows = rows[~reported[column.name][rows]]
        reported[column.name][rows] = True
        values = table.frame[column.name]
        problem = {
            "finite": "is not a finite number; give a figure",
            "limits": f"is outside its limits; it must be {column.limits} {column.unit}".rstrip(),
            "pattern": "has white space where none may be, or is blank; use names without spaces"
            + (", one space between them" if column.name == "legs" else ""),
        }.get(str(check))
        if problem is None:
            faults.add_rows(table.file, rows, table.line_of, column.name, lambda _: "the value is missing; fill it in")
        else:
            faults.add_rows(
                table.file,
                rows,
                table.line_of,
                column.name,
                lambda row, values=values, problem=problem: f"{_quote(values.iloc[row])} {problem}",  # type: ignore[misc]
            )


def _check_key(table: TableData, faults: Faults) -> None:
    """Note every row whose key repeats that of an earlier row."""
    key = list(table.schema.key)
    whole = table.frame[key].notna().all(axis=1).to_numpy()
    frame = table.frame[key]
    repeated = frame.duplicated(keep="first").to_numpy() & whole
    if not repeated.any():
        return
    first = {values: row for row, values in reversed(list(enumerate(frame.itertuples(index=False, name=None))))}
    faults.add_rows(
        table.file,
        np.flatnonzero(repeated),
        table.line_of,
        key[0] if len(key) == 1 else " and ".join(key),
        lambda row: (
            f"{' '.join(map(str, frame.iloc[row]))} stands already in line "
            f"{table.line_of(first[tuple(frame.iloc[row])])}; keep one of the two"
        ),
    )


def _quote(value: object) -> str:
    text = repr(value) if isinstance(value, str) else f"{value:.10g}" if isinstance(value, float) else str(value)
    return text if len(text) <= 60 else text[:57] + "..."
