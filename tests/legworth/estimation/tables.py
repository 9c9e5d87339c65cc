"""Small history tables as text, and a folder that they are for."""

from __future__ import annotations

from collections.abc import Sequence
from datetime import datetime, timedelta, timezone
from pathlib import Path

import numpy as np

from legworth.estimation.history_table import HistoryResult, read_history
from network import InputError

__all__ = ["AS_OF", "CLASSES", "HEADER", "NAMES", "faults_of", "read_text"]

HEADER = "departure,itinerary,fare_class,days_before,booked,open"
NAMES = np.array(["NOR-HUB", "HUB-SUD", "NOR-SUD"], dtype=object)
CLASSES = ("A", "B", "C")
AS_OF = datetime(2030, 2, 25, 2, 30, tzinfo=timezone(timedelta(hours=1)))


def read_text(folder: Path, rows: Sequence[str], header: str = HEADER, **how: object) -> HistoryResult:
    """Read rows as a CSV table."""
    path = folder / "history.csv"
    path.write_text("\n".join([header, *rows]) + "\n", encoding="utf-8")
    return read_history(path, NAMES, CLASSES, AS_OF, **how)  # type: ignore[arg-type]


def faults_of(folder: Path, rows: Sequence[str], header: str = HEADER, **how: object) -> list[str]:
    """Faults of such a table, one line each."""
    try:
        read_text(folder, rows, header, **how)
    except InputError as error:
        return [str(fault) for fault in error.faults]
    return []
