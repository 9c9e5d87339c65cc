"""A simulation on disk: all its files, or none."""

from __future__ import annotations

import json
import shutil
import tempfile
from pathlib import Path
from typing import Any

import pandas as pd

from legworth.writing import write_table
from network import SettingError

__all__ = ["write_simulation"]


def write_simulation(out: Path, table: pd.DataFrame, document: dict[str, Any], page: str) -> list[Path]:
    """Write ``simulation.csv``, ``simulation.json`` and ``simulation.html`` into a folder; returns their paths.

    Raises
    ------
    SettingError
        If the folder cannot be written.
    """
    names = ("simulation.csv", "simulation.json", "simulation.html")
    made = not out.exists()
    try:
        out.mkdir(parents=True, exist_ok=True)
        aside = Path(tempfile.mkdtemp(prefix=".unfinished-", dir=out))
        try:
            write_table(aside / names[0], table)
            text = json.dumps(document, indent=2, ensure_ascii=False, allow_nan=False)
            (aside / names[1]).write_text(text + "\n", encoding="utf-8")
            (aside / names[2]).write_text(page, encoding="utf-8")
            for name in names:
                (aside / name).replace(out / name)
        finally:
            shutil.rmtree(aside, ignore_errors=True)
            if made and not any(out.iterdir()):
                out.rmdir()
    except OSError as error:
        raise SettingError(f"cannot write to {out} ({error.strerror}); free space or name another folder") from error
    return [out / name for name in names]
