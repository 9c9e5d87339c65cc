"""A simulation on disk: all its files, or none."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import pandas as pd

from legworth.placing import folder_aside, place_together
from legworth.writing import write_table

__all__ = ["write_simulation"]


def write_simulation(out: Path, table: pd.DataFrame, document: dict[str, Any], page: str) -> list[Path]:
    """Write ``simulation.csv``, ``simulation.json`` and ``simulation.html`` into a folder; returns their paths.

    Raises
    ------
    SettingError
        If the folder cannot be written.
    """
    names = ("simulation.csv", "simulation.json", "simulation.html")
    with folder_aside(out, names) as aside:
        write_table(aside / names[0], table)
        text = json.dumps(document, indent=2, ensure_ascii=False, allow_nan=False)
        (aside / names[1]).write_text(text + "\n", encoding="utf-8")
        (aside / names[2]).write_text(page, encoding="utf-8")
        place_together(aside, out, names)
    return [out / name for name in names]
