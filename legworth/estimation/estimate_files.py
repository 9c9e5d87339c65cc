"""An estimate on disk: all its files, or none; what people had put there before is kept."""

from __future__ import annotations

import hashlib
import json
import shutil
from pathlib import Path
from typing import Any

import pandas as pd

from legworth.placing import folder_aside, place_together
from legworth.writing import TableFormat, write_table

__all__ = ["DOCUMENT", "PAGE", "write_estimate"]

DOCUMENT, PAGE = "estimate.json", "estimate.html"
KEPT = ("demand", "booking_curves")
"""Tables of a folder that people may have written themselves."""


def write_estimate(
    out: Path, tables: dict[str, pd.DataFrame], document: dict[str, Any], page: str, table_format: TableFormat = "csv"
) -> tuple[list[Path], list[Path]]:
    """Write an estimate into a folder.

    All files are written aside first and moved into place at the end, booking curves before the demand that
    names them, so that a run that fails leaves the folder as it was. Demand and booking curves that stand there and
    are not known from ``estimate.json`` as those of an earlier estimate are kept, under their names with ``.before`` at
    the end, or ``.before2`` and so on where something else is kept already.

    Parameters
    ----------
    out
        The folder; made if it is not there.
    tables
        Tables by name.
    document
        Written as ``estimate.json``, with the SHA-256 of the tables added under ``files``.
    page
        Written as ``estimate.html``.
    table_format
        Format of the tables.

    Returns
    -------
    written, kept
        The files in their places, and those that were kept.

    Raises
    ------
    SettingError
        If the folder cannot be written.
    """
    names = [f"{name}.{table_format}" for name in ("booking_curves", "demand", "estimates")]
    with folder_aside(out, (*names, DOCUMENT, PAGE)) as aside:
        for name in names:
            write_table(aside / name, tables[name.partition(".")[0]])
        document = {**document, "files": {name: _digest(aside / name) for name in names}}
        text = json.dumps(document, indent=2, ensure_ascii=False, allow_nan=False)
        (aside / DOCUMENT).write_text(text + "\n", encoding="utf-8")
        (aside / PAGE).write_text(page, encoding="utf-8")
        kept = _keep(out)
        # A folder may hold a table in one format only.
        other = "parquet" if table_format == "csv" else "csv"
        gone = [Path(name).with_suffix(f".{other}").name for name in names]
        place_together(aside, out, (*names, DOCUMENT, PAGE), gone)
    return [out / name for name in (*names, DOCUMENT, PAGE)], kept


def _keep(out: Path) -> list[Path]:
    """Keep copies of tables that people wrote, and of nothing twice; returns them."""
    known, kept = _known(out / DOCUMENT), []
    for name in KEPT:
        for ending in ("csv", "parquet"):
            path = out / f"{name}.{ending}"
            if path.is_file() and known.get(path.name) != _digest(path):
                names = (out / f"{path.name}.before{number or ''}" for number in (0, *range(2, 10_000)))
                place = next(name for name in names if not name.exists() or _digest(name) == _digest(path))
                copy = out / f".{path.name}.keeping"
                shutil.copy2(path, copy)
                copy.replace(place)
                kept.append(place)
    return kept


def _known(document: Path) -> dict[str, str]:
    """SHA-256 of the tables of an earlier estimate by name; none if there is no such document."""
    try:
        files = json.loads(document.read_text(encoding="utf-8"))["files"]
    except (OSError, ValueError, KeyError, TypeError):
        return {}
    return {str(name): str(digest) for name, digest in files.items()} if isinstance(files, dict) else {}


def _digest(path: Path) -> str:
    with path.open("rb") as file:
        return hashlib.file_digest(file, "sha256").hexdigest()
