"""Faults in input: where, what is wrong, and what would mend it."""

from __future__ import annotations

from collections.abc import Callable, Iterable
from dataclasses import dataclass, field

from network.errors import InputError

__all__ = ["LISTED_PER_KIND", "Fault", "Faults"]

LISTED_PER_KIND = 25
"""Faults of one kind in one column that are listed one by one; the rest are counted in one line."""


@dataclass(frozen=True, order=True)
class Fault:
    """One fault.

    Attributes
    ----------
    file
        Name of the file inside the network folder.
    line
        Line in a CSV file (the header is line 1), row in a Parquet file, 0 for the file as a whole.
    column
        Column or setting, empty for the line as a whole.
    problem
        What is wrong, and what would mend it.
    warning
        True when prices can be computed all the same.
    count
        How many faults this one stands for; more than 1 where the rest of a kind is counted in one line.
    """

    file: str
    line: int
    column: str
    problem: str
    warning: bool = False
    count: int = 1

    def __str__(self) -> str:
        """One line whatever names it quotes: what cannot be printed is escaped."""
        place = f"{self.file}:{self.line}" if self.line else self.file
        column = f"{self.column}: " if self.column else ""
        text = f"{place}: {column}{'warning: ' if self.warning else ''}{self.problem}"
        return "".join(sign if sign.isprintable() else repr(sign)[1:-1] for sign in text)


@dataclass
class Faults:
    """Collects faults over all tables, so that they can be listed together."""

    found: list[Fault] = field(default_factory=list)

    def add(self, file: str, line: int, column: str, problem: str, *, warning: bool = False, count: int = 1) -> None:
        """Note one fault, or one that stands for several."""
        self.found.append(Fault(file, int(line), column, problem, warning, count))

    def add_rows(
        self,
        file: str,
        rows: Iterable[int],
        line_of: Callable[[int], int],
        column: str,
        problem: Callable[[int], str],
        *,
        warning: bool = False,
    ) -> None:
        """Note one fault of the same kind for each row position, and count those beyond the limit."""
        rows = list(rows)
        for row in rows[:LISTED_PER_KIND]:
            self.add(file, line_of(row), column, problem(row), warning=warning)
        if len(rows) > LISTED_PER_KIND:
            rest = len(rows) - LISTED_PER_KIND
            line = line_of(rows[LISTED_PER_KIND])
            self.add(file, line, column, f"and {rest:,} more like it from here on", warning=warning, count=rest)

    def concern(self, table: str) -> bool:
        """True if an error has been noted in a table, whatever its format."""
        return any(not fault.warning and fault.file.rpartition(".")[0] == table for fault in self.found)

    @property
    def errors(self) -> list[Fault]:
        """Faults that forbid any number, in file and line order."""
        return sorted(fault for fault in self.found if not fault.warning)

    @property
    def warnings(self) -> list[Fault]:
        """Faults that do not, in file and line order."""
        return sorted(fault for fault in self.found if fault.warning)

    def raise_errors(self) -> None:
        """Raise `InputError` with every error found so far, if there is one."""
        if self.errors:
            raise InputError(self.errors)
