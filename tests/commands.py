"""The real command line, run in this process."""

from __future__ import annotations

import contextlib
import io
import sys
from dataclasses import dataclass
from pathlib import Path
from unittest import mock

from legworth.cli import main


@dataclass(frozen=True)
class Outcome:
    """What a command ended with and printed."""

    code: int
    out: str
    err: str


def run(*arguments: str | Path) -> Outcome:
    """Run ``legworth`` with arguments; an error that ``main`` lets through is a failure of the test."""
    out, err = (io.TextIOWrapper(io.BytesIO(), encoding="utf-8", write_through=True) for _ in range(2))
    code = 0
    with (
        mock.patch.object(sys, "argv", ["legworth", *map(str, arguments)]),
        contextlib.redirect_stdout(out),
        contextlib.redirect_stderr(err),
    ):
        try:
            main()
        except SystemExit as stop:
            code = stop.code if isinstance(stop.code, int) else int(stop.code is not None)
    return Outcome(code, out.buffer.getvalue().decode(), err.buffer.getvalue().decode())
