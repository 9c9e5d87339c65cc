"""The journal of a night: one JSON line per event in the store, and readable lines on a terminal."""

from __future__ import annotations

import sys
from collections.abc import MutableMapping
from pathlib import Path
from typing import Any, TextIO

import click
import structlog

from legworth.store.disk import one_line_errors

__all__ = ["Journal"]


class Journal:
    """Where the events of a night are written as they happen.

    Parameters
    ----------
    path
        File of JSON lines, added to.
    """

    def __init__(self, path: Path) -> None:
        self._path = path
        with one_line_errors(path, "write"):
            path.parent.mkdir(parents=True, exist_ok=True)
            self._file: TextIO = path.open("a", encoding="utf-8", buffering=1)
        self._logger = structlog.wrap_logger(
            structlog.WriteLogger(self._file),
            processors=[
                structlog.processors.add_log_level,
                structlog.processors.TimeStamper(fmt="iso", utc=True, key="at"),
                _told,
                structlog.processors.JSONRenderer(ensure_ascii=False, default=str),
            ],
            wrapper_class=structlog.BoundLogger,
            cache_logger_on_first_use=True,
        )

    def note(self, event: str, line: str = "", **fields: Any) -> None:
        """Note an event; ``line`` is what a person at a terminal reads of it, nothing if empty."""
        with one_line_errors(self._path, "write"):
            self._logger.info(event, line=line, **fields)

    def warn(self, event: str, line: str, **fields: Any) -> None:
        """Note that something went wrong and what is done about it."""
        with one_line_errors(self._path, "write"):
            self._logger.warning(event, line=line, **fields)

    def fail(self, event: str, **fields: Any) -> None:
        """Note why the night ends without result; the command says it on the terminal."""
        with one_line_errors(self._path, "write"):
            self._logger.error(event, line="", **fields)

    def close(self) -> None:
        """Close the file."""
        self._file.close()


def _told(_: Any, level: str, event: MutableMapping[str, Any]) -> MutableMapping[str, Any]:
    """Print the readable line on a terminal, and keep it out of the JSON where it says no more than the fields."""
    line = event.pop("line", "")
    if line and sys.stderr.isatty():
        click.echo(f"{'warning: ' if level == 'warning' else ''}{line}", err=True)
    if line and level == "warning":
        event["problem"] = line
    return event
