"""The journal of a night: one JSON line per event in the store, and readable lines on a terminal."""

from __future__ import annotations

import sys
from collections.abc import Callable, MutableMapping
from pathlib import Path
from typing import Any, TextIO

import click
import structlog

from legworth.store.disk import one_line_errors

__all__ = ["Journal"]


class Journal:
    """Where the events of a night are written as they happen.

    Once it is open it raises nothing: a log that can be written no longer is remarked on once, and decides neither
    whether a night goes into force nor what is told of one that does not.

    Parameters
    ----------
    path
        File of JSON lines, added to.
    """

    def __init__(self, path: Path) -> None:
        self._path, self._told_full = path, False
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
        self._write(lambda: self._logger.info(event, line=line, **fields))

    def warn(self, event: str, line: str, **fields: Any) -> None:
        """Note that something went wrong and what is done about it."""
        self._write(lambda: self._logger.warning(event, line=line, **fields))

    def fail(self, event: str, **fields: Any) -> None:
        """Note why the night ends without result; the command says it on the terminal."""
        self._write(lambda: self._logger.error(event, line="", **fields))

    def close(self) -> None:
        """Close the file."""
        self._write(self._file.close)

    def _write(self, line: Callable[[], object]) -> None:
        try:
            line()
        except OSError as error:
            if not self._told_full:
                self._told_full = True
                click.echo(f"warning: cannot write {self._path} ({error.strerror}); this log is cut short", err=True)


def _told(_: Any, level: str, event: MutableMapping[str, Any]) -> MutableMapping[str, Any]:
    """Print the readable line on a terminal, and keep it out of the JSON where it says no more than the fields."""
    line = event.pop("line", "")
    if line and sys.stderr.isatty():
        click.echo(f"{'warning: ' if level == 'warning' else ''}{line}", err=True)
    if line and level == "warning":
        event["problem"] = line
    return event
