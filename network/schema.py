"""Table schemas: every column of every table is declared once, in a Table Schema JSON file.

The files follow the open Table Schema standard of the Data Package project, with three properties of our own that
the standard permits: ``unit``, ``optional`` (the column or table may be left out) and ``mayBeEmpty``. Reader,
validator, documentation and result writers all work from the objects made here.
"""

from __future__ import annotations

import json
import re
from collections.abc import Iterator
from dataclasses import dataclass
from functools import cache, cached_property
from importlib.resources import files
from typing import TYPE_CHECKING, Any, Literal

if TYPE_CHECKING:
    from pandera.pandas import DataFrameSchema

__all__ = ["Column", "TableSchema", "input_schemas", "table_schema"]

ColumnType = Literal["string", "number", "integer", "datetime", "date", "boolean"]
INPUT_TABLES = ("stations", "legs", "itineraries", "fares", "demand", "booking_curves")


@dataclass(frozen=True)
class Column:
    """One column: name, Table Schema type, meaning, unit, limits."""

    name: str
    type: ColumnType
    description: str
    unit: str = ""
    optional: bool = False
    required: bool = False
    unique: bool = False
    minimum: float | None = None
    maximum: float | None = None
    pattern: str | None = None

    @property
    def numeric(self) -> bool:
        """True for numbers and integers."""
        return self.type in ("number", "integer")

    @property
    def limits(self) -> str:
        """The limits in words, for documentation and messages."""
        if self.minimum is None and self.maximum is None:
            return ""
        if self.maximum is None:
            return f"at least {self.minimum:,.10g}"
        if self.minimum is None:
            return f"at most {self.maximum:,.10g}"
        return f"from {self.minimum:,.10g} to {self.maximum:,.10g}"


@dataclass(frozen=True)
class TableSchema:
    """One table: its columns in order, its key, whether a folder may lack it, and whether it may have no rows."""

    name: str
    title: str
    description: str
    columns: tuple[Column, ...]
    key: tuple[str, ...]
    optional: bool = False
    may_be_empty: bool = False

    def __iter__(self) -> Iterator[Column]:
        return iter(self.columns)

    @cached_property
    def names(self) -> tuple[str, ...]:
        """Names of the columns in order."""
        return tuple(column.name for column in self.columns)

    def column(self, name: str) -> Column:
        """Return the column of that name; KeyError if there is none."""
        return next(column for column in self.columns if column.name == name)

    @cached_property
    def checks(self) -> DataFrameSchema:
        """The limits of all columns as a pandera schema, which checks whole columns at once."""
        from pandera.pandas import Check, DataFrameSchema
        from pandera.pandas import Column as Checked

        def checks_of(column: Column) -> list[Any]:
            found = []
            if column.type == "number":
                found.append(Check(lambda s: s.isna() | (s.abs() < float("inf")), error="finite"))
            if column.minimum is not None:
                found.append(Check.ge(column.minimum, error="limits"))
            if column.maximum is not None:
                found.append(Check.le(column.maximum, error="limits"))
            if column.pattern is not None:
                whole = re.compile(f"(?:{column.pattern})\\Z")
                found.append(Check(lambda s: s.astype("str").str.match(whole).fillna(True), error="pattern"))
            return found

        return DataFrameSchema(
            {
                column.name: Checked(
                    checks=checks_of(column), nullable=not column.required, required=not column.optional
                )
                for column in self.columns
            }
        )


def table_schema(package: str, name: str) -> TableSchema:
    """Load the schema of table ``name`` from the ``schemas`` folder of a package of this project."""
    text = (files(package) / "schemas" / f"{name}.json").read_text(encoding="utf-8")
    declared = json.loads(text)
    columns = []
    for entry in declared["fields"]:
        limits = entry.get("constraints", {})
        columns.append(
            Column(
                name=entry["name"],
                type=entry["type"],
                description=entry["description"],
                unit=entry.get("unit", ""),
                optional=entry.get("optional", False),
                required=limits.get("required", False),
                unique=limits.get("unique", False),
                minimum=limits.get("minimum"),
                maximum=limits.get("maximum"),
                pattern=limits.get("pattern"),
            )
        )
    return TableSchema(
        name=declared["name"],
        title=declared["title"],
        description=declared["description"],
        columns=tuple(columns),
        key=tuple(declared["primaryKey"]),
        optional=declared.get("optional", False),
        may_be_empty=declared.get("mayBeEmpty", False),
    )


@cache
def input_schemas() -> dict[str, TableSchema]:
    """The schemas of the tables of a network folder, in reading order."""
    return {name: table_schema("network", name) for name in INPUT_TABLES}
