"""Cells of a table: every column brought to its declared type, then its limits and the key checked."""

from __future__ import annotations

from collections.abc import Callable, Iterable
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
import pandas as pd
from pandera.errors import SchemaErrors

from network.arrays import BoolArray
from network.faults import Faults
from network.schema import Column, TableSchema

__all__ = ["RawTable", "TableData", "typed_table"]


NUMBER = r"[+-]?(?:[0-9]+\.?[0-9]*|\.[0-9]+)(?:[eE][+-]?[0-9]+)?"
INSTANT = (
    r"([0-9]{4}-[0-9]{2}-[0-9]{2})[T ]([0-9]{2}:[0-5][0-9])(?::([0-5][0-9])(?:\.[0-9]+)?)?"
    r"(Z|[+-][0-9]{2}:?[0-5][0-9])?"
)
GREATEST_OFFSET = 14 * 60
"""Minutes from UTC beyond which no clock on Earth is set (W3C XML Schema Part 2, 3.2.7.3)."""
CHECKS = ("not_nullable", "finite", "limits", "pattern")
"""The checks of a column, the one that tells most first."""

ROWS_AT_ONCE = 1_000_000
"""Rows whose limits are checked together, so that what the checks need in between stays small."""

EXAMPLE = "write it as 2027-03-01T06:40+01:00"


@dataclass(frozen=True)
class TableData:
    """One table as read.

    ``frame`` holds numbers as float64 or int64, text (dates and truth values too) as categories, and every datetime
    column as two:
    the instant in UTC and, under the name with ``_offset``, its offset in minutes. ``line_of`` gives
    the line (CSV) or row (Parquet) of a row position.
    """

    schema: TableSchema
    file: str
    frame: pd.DataFrame
    line_of: Callable[[int], int]

    def __len__(self) -> int:
        return len(self.frame)


@dataclass(frozen=True)
class RawTable:
    """Columns by name, text or already numbers; ``at_fault`` marks rows noted as faulty as a whole."""

    schema: TableSchema
    file: str
    columns: dict[str, pd.Series]
    line_of: Callable[[int], int]
    at_fault: BoolArray

    def note(self, faults: Faults, rows: Iterable[int], column: str, problem: Callable[[int], str]) -> None:
        """Note one fault of the same kind for each row position."""
        faults.add_rows(self.file, rows, self.line_of, column, problem)


def typed_table(raw: RawTable, faults: Faults) -> TableData:
    """Bring every column to its declared type, and note every cell that breaks its type, a limit or the key.

    Cells at fault are left empty, and of a row at fault as a whole only the key is kept, so that one fault is
    not told again as another; names stay as they are.
    """
    columns: dict[str, pd.Series | np.ndarray] = {}
    reported: dict[str, BoolArray] = {}
    length = len(raw.at_fault)
    for column in raw.schema:
        values = raw.columns.get(column.name)
        if values is None:
            values = pd.Series([None] * length, dtype="float64" if column.numeric else "str")
        elif raw.at_fault.any() and column.name not in raw.schema.key:
            values = values.mask(raw.at_fault)
        if column.numeric:
            columns[column.name], bad = _numbers(raw, values, column, faults)
        elif column.type == "datetime":
            columns[column.name], columns[f"{column.name}_offset"], bad = _instants(raw, values, column, faults)
        else:
            columns[column.name], bad = values.astype("category"), np.zeros(length, dtype=bool)
        reported[column.name] = bad | raw.at_fault
    frame = pd.DataFrame(columns, copy=False)
    _check_limits(raw, frame, reported, faults)
    _check_key(raw, frame, faults)
    return TableData(raw.schema, raw.file, frame, raw.line_of)


def _numbers(raw: RawTable, values: pd.Series, column: Column, faults: Faults) -> tuple[pd.Series, BoolArray]:
    if pd.api.types.is_numeric_dtype(values):
        numbers = values.astype("float64") if column.type == "number" else values
    else:
        text = values.astype("str").str.strip()
        shaped = text.str.fullmatch(NUMBER).fillna(False).to_numpy(dtype=bool)
        exact = [float(value) if fits else np.nan for value, fits in zip(text.tolist(), shaped, strict=True)]
        numbers = pd.Series(exact, index=values.index, dtype="float64")
    bad = values.notna().to_numpy() & numbers.isna().to_numpy()
    if column.type == "integer" and pd.api.types.is_float_dtype(numbers):
        figures = numbers.to_numpy()
        bad |= ~np.isnan(figures) & ((figures != np.floor(figures)) | np.isinf(figures))
        numbers = numbers.mask(bad)
    wanted = "number; write digits with a point for decimals"
    wanted = wanted if column.type == "number" else "whole number; write digits alone"
    raw.note(faults, np.flatnonzero(bad), column.name, lambda row: f"{_quote(values.iloc[row])} is not a {wanted}")
    return numbers, bad


def _instants(
    raw: RawTable, values: pd.Series, column: Column, faults: Faults
) -> tuple[pd.Series, npt.NDArray[np.int64], BoolArray]:
    if isinstance(values.dtype, pd.DatetimeTZDtype):
        return _zoned_instants(raw, values, column, faults)
    parts = values.astype("str").str.strip().str.extract(f"^{INSTANT}$")
    stamp = parts[0] + "T" + parts[1] + ":" + parts[2].fillna("00")
    local_time = pd.to_datetime(stamp, format="%Y-%m-%dT%H:%M:%S", errors="coerce")
    sign = np.where(parts[3].str[0] == "-", -1, 1)
    digits = parts[3].fillna("Z").replace("Z", "+00:00").str.replace(":", "")
    hours, rest = (digits.str[part].astype("int64").to_numpy() for part in (slice(1, 3), slice(3, 5)))
    minutes = (sign * (hours * 60 + rest)).astype(np.int64)
    present = values.notna().to_numpy()
    unreadable = present & (local_time.isna().to_numpy() | (np.abs(minutes) > GREATEST_OFFSET))
    without = present & ~unreadable & parts[3].isna().to_numpy()
    for bad, problem in ((unreadable, "is not a date and time"), (without, "has no offset from UTC")):
        raw.note(faults, np.flatnonzero(bad), column.name, _quoting(values, f"{problem}; {EXAMPLE}"))
    utc = local_time - pd.to_timedelta(minutes, unit="min")
    return utc.astype("datetime64[s]").mask(unreadable | without), minutes, unreadable | without


def _zoned_instants(
    raw: RawTable, values: pd.Series, column: Column, faults: Faults
) -> tuple[pd.Series, npt.NDArray[np.int64], BoolArray]:
    """Instants of a Parquet column that has a time zone, with the offset that the zone has then."""
    utc = values.dt.tz_convert("UTC").dt.tz_localize(None).astype("datetime64[s]")
    first, last = np.datetime64("1000-01-01", "s"), np.datetime64("9999-01-01", "s")
    bad = ((utc < first) | (utc > last)).to_numpy(copy=True)
    raw.note(
        faults,
        np.flatnonzero(bad),
        column.name,
        lambda row: f"{utc.to_numpy()[row]} is not a date and time of the calendar; {EXAMPLE}",
    )
    utc = utc.mask(bad)
    local = values.mask(bad).dt.tz_localize(None).to_numpy(dtype="datetime64[s]")
    offsets: npt.NDArray[np.int64] = (local - utc.to_numpy(dtype="datetime64[s]")).astype(np.int64) // 60
    offsets[utc.isna().to_numpy()] = 0
    return utc, offsets, bad


def _check_limits(raw: RawTable, frame: pd.DataFrame, reported: dict[str, BoolArray], faults: Faults) -> None:
    """Note every cell that breaks a limit which its schema declares, and empty it if it is a number."""
    cases = []
    for first in range(0, len(frame), ROWS_AT_ONCE):
        try:
            raw.schema.checks.validate(frame.iloc[first : first + ROWS_AT_ONCE], lazy=True)
        except SchemaErrors as errors:
            cases.append(errors.failure_cases)
    groups = dict(list(pd.concat(cases).groupby(["column", "check"]))) if cases else {}
    for name, check in sorted(groups, key=lambda case: (raw.schema.names.index(case[0]), CHECKS.index(case[1]))):
        column, values = raw.schema.column(name), frame[name]
        rows = np.sort(groups[name, check]["index"].to_numpy(dtype=np.int64))
        rows = rows[~reported[name][rows]]
        reported[column.name][rows] = True
        if check == "not_nullable":
            raw.note(faults, rows, column.name, lambda _: "the value is missing; fill it in")
            continue
        problem = {
            "finite": "is not a finite number; give a figure",
            "limits": f"is outside its limits; it must be {column.limits} {column.unit}".rstrip(),
            "pattern": "has white space where none may be, or is blank; use names without spaces"
            + (", one space between them" if column.name == "legs" else ""),
        }[check]
        raw.note(faults, rows, column.name, _quoting(values, problem))
        if column.numeric:
            frame[column.name] = values.mask(np.isin(np.arange(len(frame)), rows))


def _check_key(raw: RawTable, frame: pd.DataFrame, faults: Faults) -> None:
    """Note every row whose key repeats that of an earlier row."""
    key = list(raw.schema.key)
    code = _key_codes(frame[key])
    steps = np.diff(code)
    if np.all(steps > 0):  # as in most tables, so that nothing need be sorted
        return
    ordered = np.sort(code[code >= 0])
    if not np.any(ordered[1:] == ordered[:-1]):
        return
    codes = pd.Series(code)
    repeated = codes.duplicated(keep="first").to_numpy() & (code >= 0)
    involved = np.flatnonzero(codes.duplicated(keep=False).to_numpy() & (code >= 0))
    rows = dict(zip(involved.tolist(), frame[key].iloc[involved].itertuples(index=False, name=None), strict=True))
    first = {values: row for row, values in reversed(rows.items())}
    place = "row" if raw.file.endswith(".parquet") else "line"
    raw.note(
        faults,
        np.flatnonzero(repeated),
        key[0] if len(key) == 1 else " and ".join(key),
        lambda row: (
            f"{' '.join(_plain(value) for value in rows[row])} stands already in {place} "
            f"{raw.line_of(first[rows[row]])}; keep one of the two"
        ),
    )


def _key_codes(keys: pd.DataFrame) -> npt.NDArray[np.int64]:
    """(n,) one whole number for each different key, -1 where a part of it is missing; rising if the rows are."""
    answer = np.zeros(len(keys), dtype=np.int64)
    whole = np.ones(len(keys), dtype=bool)
    for name in keys.columns:
        values = keys[name]
        if isinstance(values.dtype, pd.CategoricalDtype):
            code, size = values.cat.codes.to_numpy(), len(values.cat.categories)
        else:
            code, found = pd.factorize(values, sort=True)
            size = len(found)
        answer *= max(size, 1)
        answer += code
        whole &= code >= 0
    answer[~whole] = -1
    return answer


def _plain(value: object) -> str:
    return f"{value:.10g}" if isinstance(value, float) else str(value)


def _quoting(values: pd.Series, problem: str) -> Callable[[int], str]:
    """Say of a row that its value has this problem."""
    return lambda row: f"{_quote(values.iloc[row])} {problem}"


def _quote(value: object) -> str:
    text = repr(value) if isinstance(value, str) else _plain(value)
    return text if len(text) <= 60 else text[:57] + "..."
