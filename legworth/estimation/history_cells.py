"""Cells of the history table: whole columns brought to their declared types, every fault with its row."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
import pyarrow as pa
import pyarrow.compute as pc

from network.arrays import BoolArray, FloatArray, IntArray, NameArray
from network.cells import NUMBER
from network.faults import Faults
from network.schema import Column, TableSchema

__all__ = ["FALSE", "TRUE", "Cells", "RawColumns", "first_rows"]

TRUE, FALSE = ("true", "True", "TRUE", "1"), ("false", "False", "FALSE", "0")
FIRST, LAST = (int(np.datetime64(day, "D").astype(np.int64)) for day in ("1900-01-01", "2199-12-31"))
DATE = "^[0-9]{4}-[0-9]{2}-[0-9]{2}$"


@dataclass(frozen=True, eq=False)
class RawColumns:
    """Columns as read, of whatever type, and where their rows stand."""

    file: str
    columns: dict[str, pa.ChunkedArray]
    line_of: Callable[[int], int]
    rows: int


def first_rows(code: IntArray, n: int) -> IntArray:
    """(n,) first row of each code; the number of rows where it has none."""
    first = np.full(n + 1, len(code), dtype=np.int64)
    np.minimum.at(first, code, np.arange(len(code)))
    return first[:n]


class Cells:
    """Columns of a table brought to numpy, faults noted."""

    def __init__(self, table: RawColumns, schema: TableSchema, faults: Faults) -> None:
        self.table, self.schema, self.faults = table, schema, faults

    def _note(self, name: str, bad: BoolArray, problem: Callable[[int], str]) -> None:
        rows = np.flatnonzero(bad).tolist()
        if rows:
            self.faults.add_rows(self.table.file, rows, self.table.line_of, name, problem)

    def _missing(self, name: str, values: pa.ChunkedArray) -> BoolArray:
        missing = _plain(pc.is_null(values))
        if values.null_count and self.schema.column(name).required:
            self._note(name, missing, lambda _: "the value is missing; fill it in")
        return missing

    def _text(self, name: str) -> pa.ChunkedArray:
        """A column as text, for messages and for parsing; blank is missing."""
        values = self.table.columns[name]
        if pa.types.is_dictionary(values.type):
            values = values.cast(values.type.value_type)
        text = pc.utf8_trim_whitespace(values.cast(pa.string()))
        return pc.if_else(pc.equal(text, ""), None, text)

    def names(self, name: str) -> tuple[IntArray, NameArray]:
        """(R,) positions in the names found, -1 where missing, and these names in their alphabetical order."""
        values = self.table.columns[name]
        if not (pa.types.is_dictionary(values.type) and pa.types.is_string(values.type.value_type)):
            values = self._text(name).dictionary_encode()
        values = values.unify_dictionaries().combine_chunks()
        if isinstance(values, pa.ChunkedArray):
            values = pa.concat_arrays(values.chunks) if values.num_chunks else pa.array([], type=values.type)
        names = np.array(values.dictionary.to_pylist(), dtype=object)
        codes = values.indices.fill_null(-1).to_numpy(zero_copy_only=False).astype(np.int32, copy=False)
        blank = np.flatnonzero(names == "")
        if len(blank):
            codes = np.where(np.isin(codes, blank), np.int32(-1), codes)
        self._note(name, codes < 0, lambda _: "the value is missing; fill it in")
        order = np.argsort(names.astype(str), kind="stable")
        rank = np.empty(len(order) + 1, dtype=np.int32)
        rank[order], rank[-1] = np.arange(len(order), dtype=np.int32), -1
        return rank[codes], names[order]

    def lacking(self, name: str, codes: IntArray, names: NameArray, known: NameArray) -> dict[int, tuple[int, int]]:
        """First row and number of rows of each name that is not known."""
        wanted = set(known.tolist())
        missing = [k for k, value in enumerate(names.tolist()) if value and value not in wanted]
        if not missing:
            return {}
        rows = np.bincount(codes[codes >= 0], minlength=len(names))
        first = first_rows(codes, len(names))
        return {k: (int(first[k]), int(rows[k])) for k in missing if rows[k]}

    def note_names(self, name: str, lacking: dict[int, tuple[int, int]], names: NameArray, problem: str) -> None:
        """Note each unknown name once, with its first row."""
        order = sorted(lacking, key=lambda k: lacking[k][0])
        self.faults.add_rows(
            self.table.file,
            order,
            lambda k: self.table.line_of(lacking[k][0]),
            name,
            lambda k: f"{names[k]!r} ({lacking[k][1]:,} rows) {problem}",
        )

    def dates(self, name: str) -> IntArray:
        """(R,) days since 1970-01-01 as int32, 0 where at fault."""
        values = self.table.columns[name]
        if not pa.types.is_date(values.type):
            text = self._text(name)
            # A Parquet column of instants without zone is taken if all of them are midnights.
            text = pc.replace_substring_regex(text, "[ T]00:00:00(\\.0+)?$", "")
            shaped = pc.match_substring_regex(text, DATE)
            stamp = pc.strptime(pc.if_else(shaped, text, None), format="%Y-%m-%d", unit="s", error_is_null=True)
            # Not every parser refuses 30 February; writing the date again shows.
            again = pc.equal(pc.strftime(stamp, format="%Y-%m-%d"), text)
            parsed = pc.if_else(again, stamp, None).cast(pa.date32())
            bad = _plain(pc.and_(pc.is_valid(text), pc.is_null(parsed)))
            self._note(name, bad, lambda row: f"{text[row].as_py()!r} is not a date; write it as 2027-03-01")
            self._missing(name, text)
            values = parsed
        else:
            self._missing(name, values)
        days = _plain(values.cast(pa.date32()).cast(pa.int32()).fill_null(0))
        far = (days < FIRST) | (days > LAST)
        self._note(name, far, lambda row: f"{np.datetime64(int(days[row]), 'D')} is no date of our time; correct it")
        return np.where(far, np.int32(0), days) if far.any() else days

    def figures(self, name: str, negative: str = "") -> FloatArray:
        """(R,) numbers, NaN where missing or at fault."""
        column, values = self.schema.column(name), self.table.columns[name]
        if pa.types.is_integer(values.type) or pa.types.is_floating(values.type):
            figures = _plain(values.cast(pa.float64(), safe=False))
            missing = self._missing(name, values)
            bad = ~missing & ~np.isfinite(figures)
            text = values
        else:
            text = self._text(name)
            shaped = pc.match_substring_regex(text, f"^(?:{NUMBER})$")
            figures = _plain(pc.if_else(shaped, text, None).cast(pa.float64()))
            missing = self._missing(name, text)
            bad = ~missing & ~np.isfinite(figures)
        if column.type == "integer":
            bad |= np.isfinite(figures) & (figures != np.floor(figures))
        wanted = "number" if column.type == "number" else "whole number"
        self._note(name, bad, lambda row: f"{text[row].as_py()!r} is not a {wanted}; give a figure")
        return self._limited(column, np.where(bad, np.nan, figures) if bad.any() else figures, negative)

    def _limited(self, column: Column, figures: FloatArray, negative: str) -> FloatArray:
        low = -np.inf if column.minimum is None else column.minimum
        high = np.inf if column.maximum is None else column.maximum
        with np.errstate(invalid="ignore"):
            below, above = figures < low, figures > high
        if negative:
            self._note(column.name, below, lambda row: negative.format(f"{figures[row]:g}"))
        outside = above if negative else below | above
        limits = f"is outside its limits; it must be {column.limits} {column.unit}".rstrip()
        self._note(column.name, outside, lambda row: f"{figures[row]:.10g} {limits}")
        return np.where(below | above, np.nan, figures) if (below | above).any() else figures

    def truths(self, name: str) -> BoolArray:
        """(R,) True where it is said so."""
        values = self.table.columns[name]
        if not pa.types.is_boolean(values.type):
            text = self._text(name)
            true = pc.is_in(text, value_set=pa.array(TRUE))
            false = pc.is_in(text, value_set=pa.array(FALSE))
            bad = _plain(pc.and_(pc.is_valid(text), pc.invert(pc.or_(true, false))))
            self._note(name, bad, lambda row: f"{text[row].as_py()!r} is neither true nor false; write one of them")
            self._missing(name, text)
            return _plain(true.fill_null(False))
        self._missing(name, values)
        return _plain(values.fill_null(False))


def _plain(values: pa.ChunkedArray) -> npt.NDArray[Any]:
    return np.asarray(values.to_numpy())
