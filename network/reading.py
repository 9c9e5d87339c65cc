"""Tables of a network folder, read whole: CSV, or Parquet of the same columns.

CSV is read typed and in parallel by pyarrow. Only where that fails, or where text could be taken for a number
that it is not, are the records read again one by one, to say which cell of which line is at fault.
"""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.compute
import pyarrow.csv
import pyarrow.parquet

from network.cells import RawTable, TableData, typed_table
from network.csv_text import CsvText, check_columns, read_csv_text
from network.faults import Faults
from network.schema import Column, TableSchema

__all__ = ["TableData", "read_file", "read_table"]


def read_table(
    folder: Path, schema: TableSchema, faults: Faults, known: Mapping[str, pd.Index[str]] | None = None
) -> TableData | None:
    """Read one table of a network folder.

    Parameters
    ----------
    folder
        The network folder.
    schema
        Which table, and what its columns must be.
    faults
        Receives every fault found.
    known
        Names, each once, that columns of text are expected to hold. A large Parquet file is read faster with them, and
        without a second copy of the names: its categories begin with these, whether they occur or not.

    Returns
    -------
    TableData or None
        None if the table is absent or cannot be read at all; a table with single faulty cells is
        returned with those cells empty, so that other checks can go on.
    """
    path = _locate(folder, schema, faults)
    return None if path is None else read_file(path, schema, faults, known)


def read_file(
    path: Path, schema: TableSchema, faults: Faults, known: Mapping[str, pd.Index[str]] | None = None
) -> TableData | None:
    """Read one table from a file of any name; otherwise as `read_table`."""
    if path.suffix == ".parquet":
        raw = _read_parquet(path, schema, faults, known or {})
    else:
        raw = _read_csv(path, schema, faults)
    if raw is None:
        return None
    if len(raw.at_fault) == 0 and not schema.may_be_empty:
        faults.add(path.name, 0, "", "has a header but no rows; add rows, or remove the file if it is optional")
        return None
    return typed_table(raw, faults)


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


def _read_csv(path: Path, schema: TableSchema, faults: Faults) -> RawTable | None:
    text = read_csv_text(path, schema, faults)
    if text is None:
        return None
    table = None if text.doubtful(schema) else _parse_typed(text, schema)
    if table is None:
        return _read_records(text, schema, faults)
    columns = {name: table[name].to_pandas() for name in text.header}
    return RawTable(schema, path.name, columns, text.line_of, np.zeros(table.num_rows, dtype=bool))


def _read_records(text: CsvText, schema: TableSchema, faults: Faults) -> RawTable | None:
    """Read a CSV file record by record, everything as text."""
    records = text.records(faults)
    if records is None:
        return None
    values = zip(*records.values, strict=True) if records.values else [()] * len(text.header)
    columns = {
        name: pd.Series(column, dtype="str").replace("", None) for name, column in zip(text.header, values, strict=True)
    }
    return RawTable(schema, text.file, columns, records.line.__getitem__, np.array(records.ragged, dtype=bool))


def _parse_typed(text: CsvText, schema: TableSchema) -> pa.Table | None:
    """Parse CSV with the declared types; None if a single value does not fit, or is no finite number."""
    types = {
        "number": pa.float64(),
        "integer": pa.int64(),
        "string": pa.dictionary(pa.int32(), pa.string()),
        "datetime": pa.string(),
        "date": pa.string(),
        "boolean": pa.string(),
    }
    try:
        table = pyarrow.csv.read_csv(
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
    except pa.ArrowInvalid:
        return None
    return table if all(_finite(values) for values in table.columns) else None


def _finite(values: pa.ChunkedArray) -> bool:
    """False if there is a NaN or an infinity; empty values do not count."""
    if not pa.types.is_floating(values.type):
        return True
    return pyarrow.compute.all(pyarrow.compute.is_finite(values)).as_py() is not False


def _read_parquet(
    path: Path, schema: TableSchema, faults: Faults, known: Mapping[str, pd.Index[str]]
) -> RawTable | None:
    columns = {}
    try:
        found = pyarrow.parquet.read_schema(path)
        if not check_columns(path.name, 0, tuple(found.names), schema, faults):
            return None
        names = [field.name for field in found if _is_text(field.type) and schema.column(field.name).type == "string"]
        with pyarrow.parquet.ParquetFile(path, read_dictionary=names) as file:
            length = file.metadata.num_rows
            # Column by column, so that no more than one is held twice.
            for name in found.names:
                values = file.read([name])[name]
                column = schema.column(name)
                try:
                    values = _comparable(values, column)
                    text = column.type == "string"
                    columns[name] = _categories(values, known.get(name)) if text else values.to_pandas()
                except (pa.ArrowException, KeyError, ValueError):
                    problem = f"holds {values.type} values that cannot be taken as {column.type}; write the column anew"
                    faults.add(path.name, 0, name, problem)
    except (pa.ArrowException, OSError, ValueError, KeyError) as error:
        reason = next(iter(str(error).splitlines()), type(error).__name__)
        faults.add(path.name, 0, "", f"cannot be read as Parquet ({reason}); write it again, or give CSV")
        return None
    if len(columns) < len(found):
        return None
    return RawTable(schema, path.name, columns, lambda row: row + 1, np.zeros(length, dtype=bool))


def _is_text(kind: pa.DataType) -> bool:
    return bool(pa.types.is_string(kind) or pa.types.is_large_string(kind))


def _comparable(values: pa.ChunkedArray, column: Column) -> pa.ChunkedArray:
    """Parquet values as they would come from CSV: figures, instants with offset, or else text to be judged.

    An empty text is a missing value, as it is in CSV; a NaN is not. Text that is not UTF-8 raises.
    """
    values.validate(full=True)
    kind = values.type
    if column.type == "string" and pa.types.is_dictionary(kind) and _is_text(kind.value_type):
        return values
    if pa.types.is_dictionary(kind):
        values = values.cast(kind.value_type)
        kind = kind.value_type
    if column.type == "datetime" and pa.types.is_timestamp(kind) and kind.tz:
        return values
    if column.numeric and pa.types.is_decimal(kind):
        values, kind = values.cast(pa.float64()), pa.float64()
    if column.numeric and (pa.types.is_integer(kind) or pa.types.is_floating(kind)) and _finite(values):
        whole = column.type == "integer" and pa.types.is_integer(kind)
        return values.cast(pa.int64()) if whole else values.cast(pa.float64(), safe=False)
    text = values.cast(pa.string())
    if column.type == "string":
        return text.dictionary_encode()
    return pyarrow.compute.if_else(pyarrow.compute.equal(text, ""), None, text)


def _categories(values: pa.ChunkedArray, known: pd.Index[str] | None) -> pd.Series:
    """Text by category, those known first.

    Every stretch of a file has a dictionary of its own; only the names in these are looked at, not the rows.
    """
    names = pa.chunked_array([chunk.dictionary for chunk in values.chunks], values.type.value_type)
    encoded = names.cast(pa.large_string()).combine_chunks().dictionary_encode()
    different = encoded.dictionary
    held = np.full(len(different), -1, dtype=np.int32)
    if known is not None:
        place = pyarrow.compute.index_in(different, value_set=pa.array(known, pa.large_string()))
        held = place.fill_null(-1).to_numpy(zero_copy_only=False).copy()
    named = pyarrow.compute.not_equal(different, "").to_numpy(zero_copy_only=False)
    new = np.flatnonzero((held < 0) & named)
    held[new] = np.arange(len(new)) + (0 if known is None else len(known))
    categories = pd.Index(different.take(pa.array(new)).to_pandas())
    if known is not None:
        categories = known.append(categories.astype(known.dtype)) if len(new) else known

    code = np.append(held, np.int32(-1))[encoded.indices.fill_null(len(held)).to_numpy()]
    codes, row, begin = np.empty(len(values), dtype=np.int32), 0, 0
    for chunk in values.chunks:
        # A missing value is the last of its stretch.
        own = np.append(code[begin : begin + len(chunk.dictionary)], np.int32(-1))
        codes[row : row + len(chunk)] = own[chunk.indices.fill_null(-1).to_numpy()]
        row, begin = row + len(chunk), begin + len(chunk.dictionary)
    return pd.Series(pd.Categorical.from_codes(codes, dtype=pd.CategoricalDtype(categories)))
