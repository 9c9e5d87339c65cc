"""Results on disk: all files of a run, or none."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any, Literal

import pandas as pd
import pyarrow as pa
import pyarrow.csv
import pyarrow.parquet

from legworth.placing import folder_aside, place_together
from legworth.results import RESULT_TABLES
from network import SettingError

__all__ = ["TableFormat", "write_results", "write_table"]

TableFormat = Literal["csv", "parquet"]


def write_results(
    out: Path, tables: dict[str, pd.DataFrame], summary: dict[str, Any], table_format: TableFormat = "csv"
) -> None:
    """Write the result tables and ``summary.json``.

    Everything is written into a hidden folder inside ``out`` first and moved into place at the end, so that a run
    that fails leaves ``out`` as it was. Result tables of an earlier run that this one does not write are removed;
    files of other names in ``out`` are left alone.

    Raises
    ------
    SettingError
        If ``out`` cannot be written.
    """
    names = [*(f"{name}.{table_format}" for name in tables), "summary.json"]
    stale = {f"{name}.{ending}" for name in RESULT_TABLES for ending in ("csv", "parquet")} - set(names)
    with folder_aside(out, names) as aside:
        for name, frame in tables.items():
            _write(aside / f"{name}.{table_format}", frame)
        text = json.dumps(summary, indent=2, ensure_ascii=False, allow_nan=False)
        (aside / "summary.json").write_text(text + "\n", encoding="utf-8")
        place_together(aside, out, names, sorted(stale))


def write_table(path: Path, frame: pd.DataFrame) -> None:
    """Write one table, CSV or Parquet by its ending, whole or not at all.

    Raises
    ------
    SettingError
        If the ending is neither, or the file cannot be written.
    """
    if path.suffix not in (".csv", ".parquet"):
        raise SettingError(f"{path} ends neither in .csv nor in .parquet; name it so")
    aside = path.with_name(f".{path.name}.part{path.suffix}")
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        _write(aside, frame)
        aside.replace(path)
    except OSError as error:
        raise SettingError(f"cannot write {path} ({error.strerror}); name another file") from error
    finally:
        aside.unlink(missing_ok=True)


def _write(path: Path, frame: pd.DataFrame) -> None:
    table = pa.Table.from_pandas(frame, preserve_index=False)
    if path.suffix == ".parquet":
        pyarrow.parquet.write_table(table, path, compression="zstd")
        return
    plain = pa.table(
        {
            name: table[name].cast(pa.string()) if pa.types.is_dictionary(table[name].type) else table[name]
            for name in table.column_names
        }
    )
    try:
        pyarrow.csv.write_csv(plain, path, pyarrow.csv.WriteOptions(quoting_style="none"))
    except pa.ArrowInvalid:  # a name holds a comma or a quote
        pyarrow.csv.write_csv(plain, path, pyarrow.csv.WriteOptions(quoting_style="needed"))
